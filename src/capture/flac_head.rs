//! What stands before the frames of a FLAC file, and before the samples of a
//! frame (RFC 9639, sections 8 and 9.1).

use std::io::{Read, Seek, SeekFrom};

use super::error::CaptureError;
use super::riff::read_up_to;

/// Bytes of the shortest frame: header, constant samples, checksum.
pub(super) const LEAST_FRAME: u64 = 10;
/// Blocks before the frames that are looked at.
const MOST_BLOCKS: usize = 10_000;

/// The stream as a whole.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Head {
    pub channels: u8,
    pub bits: u8,
    /// 0 where it is not told.
    pub rate_hz: u32,
    /// Samples per channel, where they are told.
    pub total: Option<u64>,
    /// Byte at which the frames start.
    pub frames_start: u64,
    /// Samples per frame, the least and the most.
    block: (u16, u16),
}

fn bad(what: impl Into<String>) -> CaptureError {
    CaptureError::BadFlac { what: what.into() }
}

/// Length of a tag of ID3v2 in front, from its first ten bytes.
pub(super) fn id3_length(head: &[u8]) -> Option<u64> {
    match head {
        [b'I', b'D', b'3', _, _, flags, a, b, c, d, ..] => {
            let size = [a, b, c, d]
                .iter()
                .fold(0u64, |sum, &&byte| sum << 7 | u64::from(byte & 0x7F));
            let footer = if flags & 0x10 == 0 { 0 } else { 10 };
            Some(10 + size + footer)
        }
        _ => None,
    }
}

/// Reads the blocks before the frames of a file of `length` bytes.
pub(super) fn read<F: Read + Seek>(file: &mut F, length: u64) -> Result<Head, CaptureError> {
    let mut start = [0; 10];
    file.seek(SeekFrom::Start(0))?;
    let got = read_up_to(file, &mut start)?;
    let mut at = id3_length(start.get(..got).unwrap_or_default()).unwrap_or(0) + 4;
    let mut head = None;
    for _ in 0..MOST_BLOCKS {
        let mut block = [0; 4];
        file.seek(SeekFrom::Start(at))?;
        if read_up_to(file, &mut block)? < block.len() {
            return Err(bad("the file ends in its header"));
        }
        let [kind, sizes @ ..] = block;
        let size = sizes
            .iter()
            .fold(0u64, |sum, &byte| sum << 8 | u64::from(byte));
        if kind & 0x7F == 0 && head.is_none() {
            head = Some(read_stream_info(file)?);
        }
        let next = at + 4 + size;
        if kind & 0x7F == 0 && next > length {
            return Err(bad("the file ends in its header"));
        }
        if kind & 0x80 != 0 || next >= length {
            let mut head = head.ok_or_else(|| bad("no stream information"))?;
            // Where a block claims more than the file holds, the search for a
            // frame starts behind its header.
            head.frames_start = if next <= length { next } else { at + 4 };
            return Ok(head);
        }
        at = next;
    }
    Err(bad("no end to the blocks in its header"))
}

fn read_stream_info<F: Read>(file: &mut F) -> Result<Head, CaptureError> {
    let mut info = [0; 18];
    if read_up_to(file, &mut info)? < info.len() {
        return Err(bad("the file ends in its header"));
    }
    let [a, b, c, d, _, _, _, _, _, _, rest @ ..] = info;
    let bits = u64::from_be_bytes(rest);
    // 20 bits of rate, 3 of channels, 5 of bits per sample, 36 of samples.
    let total = bits & ((1 << 36) - 1);
    let head = Head {
        rate_hz: (bits >> 44) as u32,
        channels: (bits >> 41 & 7) as u8 + 1,
        bits: (bits >> 36 & 31) as u8 + 1,
        total: (total > 0).then_some(total),
        frames_start: 0,
        block: (u16::from_be_bytes([a, b]), u16::from_be_bytes([c, d])),
    };
    if let 8 | 12 | 16 | 20 | 24 = head.bits {
        Ok(head)
    } else {
        Err(CaptureError::UnsupportedFlac { bits: head.bits })
    }
}

/// Whether two bytes may start a frame.
pub(super) fn is_sync(pair: &[u8]) -> bool {
    matches!(pair, [0xFF, 0xF8 | 0xF9])
}

impl Head {
    /// Whether the bytes start like a frame of this stream.
    pub(super) fn fits(&self, bytes: &[u8]) -> bool {
        let [_, _, _, shape, ..] = bytes else {
            // Let the decoder say that the file ends.
            return true;
        };
        let channels = match shape >> 4 {
            n @ 0..=7 => n + 1,
            8..=10 => 2,
            _ => return false,
        };
        let bits = match shape >> 1 & 7 {
            1 => 8,
            2 => 12,
            4 => 16,
            5 => 20,
            6 => 24,
            _ => return false,
        };
        is_sync(bytes.get(..2).unwrap_or_default())
            && channels == self.channels
            && bits == self.bits
    }

    /// Most samples in a frame.
    pub(super) fn most_samples(&self) -> u64 {
        match self.block.1 {
            0 => 65_536,
            most => u64::from(most),
        }
    }

    /// First sample of a frame, by its own account. Frames of one length are
    /// counted, and the decoder multiplies by the frame's own length, which is
    /// wrong for the last one.
    pub(super) fn start_of(&self, block: &claxon::Block) -> u64 {
        let (time, own) = (block.time(), u64::from(block.duration()));
        let (least, most) = (u64::from(self.block.0), u64::from(self.block.1));
        if least == most && own > 0 && own < most && time.is_multiple_of(own) {
            time / own * most
        } else {
            time
        }
    }
}
