//! The chunks of a RIFF/WAVE file, read without trusting any of its sizes.
//!
//! Layout after the "Multimedia Programming Interface and Data Specifications
//! 1.0" (RIFF, and RIFX with the big end of each number first), Microsoft's `WAVEFORMATEXTENSIBLE`, and EBU Tech 3306 (RF64,
//! with the 64-bit sizes in a `ds64` chunk).

use std::io::{Read, Seek, SeekFrom};

use super::error::CaptureError;
use super::wording::count;

/// Bytes in a chunk's identifier and size.
const CHUNK_HEADER: u64 = 8;
/// "Not known yet", in every 32-bit size field.
const UNKNOWN_SIZE: u32 = u32::MAX;
/// Chunks looked at before the file is given up as garbage.
const MOST_CHUNKS: usize = 10_000;
/// Bytes searched for a chunk behind damage.
const SEARCHED: u64 = 1 << 20;

/// Which end of a number comes first.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Order {
    big: bool,
}

/// How samples are coded.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Coding {
    /// Integers; unsigned where they fit one byte.
    Integer,
    /// IEEE 754.
    Float,
    /// ITU-T G.711, 8 bits.
    ALaw,
    /// ITU-T G.711, 8 bits.
    MuLaw,
}

/// The `fmt ` chunk, mended where it contradicts itself.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Format {
    pub coding: Coding,
    pub channels: u16,
    pub rate_hz: u32,
    /// Bits that carry the sample.
    pub valid_bits: u16,
    /// Bytes that hold one sample of one channel.
    pub width: u16,
}

/// Where the samples are.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Layout {
    pub format: Format,
    /// Byte in the file at which the samples start.
    pub data_start: u64,
    /// Whole frames in the file.
    pub frames: u64,
    /// RF64 or BW64 rather than RIFF.
    pub large: bool,
    /// RIFX: the big end of each number comes first.
    pub big_end: bool,
    pub notes: Vec<String>,
}

struct Chunk {
    id: [u8; 4],
    size: u32,
    /// First byte after the header.
    start: u64,
}

/// Finds format and samples in `file`, which is `length` bytes long. Reads
/// only chunk headers, `fmt `, `ds64` and the head of `bext`.
pub(super) fn walk<F: Read + Seek>(file: &mut F, length: u64) -> Result<Layout, CaptureError> {
    let mut head = [0; 12];
    file.seek(SeekFrom::Start(0))?;
    if read_up_to(file, &mut head)? < head.len() || !is_wave(&head) {
        return Err(bad("the file ends inside it".into()));
    }
    let order = Order {
        big: head.starts_with(b"RIFX"),
    };
    let large = head.starts_with(b"RF64") || head.starts_with(b"BW64");
    let mut notes = Vec::new();
    let mut format = None;
    let mut data: Option<(Chunk, u64)> = None;
    let mut large_data_size = None;
    let mut at = head.len() as u64;

    for _ in 0..MOST_CHUNKS {
        let wanted: &[&[u8; 4]] = match (&format, &data) {
            (None, None) => &[b"fmt ", b"data"],
            (None, Some(_)) => &[b"fmt "],
            (Some(_), None) => &[b"data"],
            (Some(_), Some(_)) => &[],
        };
        let Some(chunk) = order.read_chunk(file, at)? else {
            match search(file, at, wanted)? {
                Some(next) => {
                    notes.push(format!(
                        "{} of no chunk from byte {at} on: skipped",
                        count(next - at, "byte", "bytes")
                    ));
                    at = next;
                    continue;
                }
                None => break,
            }
        };
        let start = chunk.start;
        let rest = length.saturating_sub(start);
        let mut size = u64::from(chunk.size);
        match &chunk.id {
            b"fmt " if format.is_none() => {
                format = Some(order.read_format(file, size, &mut notes)?);
            }
            b"ds64" if large => large_data_size = read_ds64(file)?,
            b"bext" => notes.extend(read_bext(file, size)?),
            // An empty one before it was given up by its recorder.
            b"data" if data.as_ref().is_none_or(|&(_, size)| size == 0) => {
                if chunk.size == UNKNOWN_SIZE && large {
                    size = large_data_size.filter(|&size| size > 0).unwrap_or(size);
                }
                if chunk.size == 0 && rest > 0 && order.read_chunk(file, chunk.start)?.is_none() {
                    notes.push("the header was never finished: read to the end of the file".into());
                    size = rest;
                } else if size < rest && order.is_wrapped(file, &chunk, size, rest)? {
                    notes.push("more than 4 GiB of samples: read to the end of the file".into());
                    size = rest;
                }
                data = Some((chunk, size));
                if start.checked_add(size).is_none_or(|end| end >= length) {
                    break;
                }
                at = order.next_chunk(file, start, size)?;
                continue;
            }
            b"data" => notes.push("a second data chunk was left out".into()),
            _ => {}
        }
        if start.checked_add(size).is_none_or(|end| end >= length) {
            // A lie, if there is still a chunk to come.
            let Some(next) = search(file, start, wanted)? else {
                break;
            };
            notes.push(format!(
                "chunk {:?} claims {size} bytes, more than the file has: skipped",
                String::from_utf8_lossy(&chunk.id)
            ));
            at = next;
            continue;
        }
        at = order.next_chunk(file, start, size)?;
    }

    let format = format.ok_or_else(|| bad("no format chunk".into()))?;
    let (chunk, claimed) = data.ok_or_else(|| bad("no data chunk".into()))?;
    let held = length.saturating_sub(chunk.start);
    let frame = u64::from(format.width) * u64::from(format.channels);
    if claimed > held {
        notes.push(
            if chunk.size == UNKNOWN_SIZE && claimed == u64::from(UNKNOWN_SIZE) {
                "the header was never finished: read to the end of the file".into()
            } else {
                format!(
                    "data chunk claims {}, file holds {}: read to the end",
                    count(claimed / frame, "frame", "frames"),
                    held / frame
                )
            },
        );
    }
    let bytes = claimed.min(held);
    if bytes % frame != 0 {
        notes.push(match bytes % frame {
            1 => "the last byte is no whole frame: left out".into(),
            n => format!("the last {n} bytes are no whole frame: left out"),
        });
    }
    Ok(Layout {
        format,
        data_start: chunk.start,
        frames: bytes / frame,
        large,
        big_end: order.big,
        notes,
    })
}

/// Whether the first 12 bytes are those of a wave file.
pub(super) fn is_wave(head: &[u8]) -> bool {
    let magic = head.get(..4).unwrap_or_default();
    matches!(magic, b"RIFF" | b"RIFX" | b"RF64" | b"BW64") && head.get(8..12) == Some(b"WAVE")
}

fn bad(what: String) -> CaptureError {
    CaptureError::BadWavHeader { what }
}

/// Fills as much of `buffer` as the reader gives.
pub(super) fn read_up_to<F: Read>(file: &mut F, buffer: &mut [u8]) -> std::io::Result<usize> {
    let mut filled = 0;
    while let Some(rest) = buffer.get_mut(filled..).filter(|rest| !rest.is_empty()) {
        match file.read(rest) {
            Ok(0) => break,
            Ok(n) => filled += n,
            Err(e) if e.kind() == std::io::ErrorKind::Interrupted => {}
            Err(e) => return Err(e),
        }
    }
    Ok(filled)
}

/// Where the next of some chunks starts, within a bounded stretch from `from` on.
fn search<F: Read + Seek>(
    file: &mut F,
    from: u64,
    wanted: &[&[u8; 4]],
) -> Result<Option<u64>, CaptureError> {
    if wanted.is_empty() {
        return Ok(None);
    }
    let mut stretch = Vec::new();
    file.seek(SeekFrom::Start(from))?;
    file.take(SEARCHED).read_to_end(&mut stretch)?;
    let found = stretch
        .windows(4)
        .position(|id| wanted.iter().any(|wanted| id == *wanted));
    Ok(found.map(|step| from + step as u64))
}

impl Order {
    /// A number of up to eight bytes.
    fn number(self, bytes: &[u8]) -> u64 {
        let add = |sum: u64, &byte: &u8| sum << 8 | u64::from(byte);
        if self.big {
            bytes.iter().fold(0, add)
        } else {
            bytes.iter().rev().fold(0, add)
        }
    }

    fn u16(self, bytes: &[u8], at: usize) -> Option<u16> {
        bytes.get(at..at + 2).map(|bytes| self.number(bytes) as u16)
    }

    fn u64(self, bytes: &[u8], at: usize) -> Option<u64> {
        bytes.get(at..at + 8).map(|bytes| self.number(bytes))
    }

    fn u32(self, bytes: &[u8], at: usize) -> Option<u32> {
        bytes.get(at..at + 4).map(|bytes| self.number(bytes) as u32)
    }

    /// The chunk header at `at`; `None` at the end of the file or where the four
    /// bytes cannot be an identifier (printable ASCII by the RIFF specification).
    fn read_chunk<F: Read + Seek>(
        self,
        file: &mut F,
        at: u64,
    ) -> Result<Option<Chunk>, CaptureError> {
        let mut header = [0; CHUNK_HEADER as usize];
        file.seek(SeekFrom::Start(at))?;
        if read_up_to(file, &mut header)? < header.len() {
            return Ok(None);
        }
        let [a, b, c, d, size @ ..] = header;
        let id = [a, b, c, d];
        if !id.iter().all(|byte| (b' '..=b'~').contains(byte)) {
            return Ok(None);
        }
        Ok(Some(Chunk {
            id,
            size: self.number(&size) as u32,
            start: at + CHUNK_HEADER,
        }))
    }

    /// Where the chunk after one of `size` bytes from `start` on begins: after a
    /// pad byte if the size is odd, but some writers forget it.
    fn next_chunk<F: Read + Seek>(
        self,
        file: &mut F,
        start: u64,
        size: u64,
    ) -> Result<u64, CaptureError> {
        let end = start + size;
        if size.is_multiple_of(2) {
            return Ok(end);
        }
        let known = |chunk: &Option<Chunk>| {
            let id = chunk.as_ref().map(|chunk| chunk.id);
            id.is_some_and(|id| [b"fmt ", b"data", b"fact", b"LIST", b"bext"].contains(&&id))
        };
        let padded = self.read_chunk(file, end + 1)?;
        let unpadded = self.read_chunk(file, end)?;
        let forgotten =
            !known(&padded) && (known(&unpadded) || padded.is_none() && unpadded.is_some());
        Ok(if forgotten { end } else { end + 1 })
    }

    /// A data chunk of more than 4 GiB whose 32-bit size has wrapped around: whole
    /// multiples of 2^32 more than it says reach past where it claims to end, and
    /// no chunk starts there.
    fn is_wrapped<F: Read + Seek>(
        self,
        file: &mut F,
        chunk: &Chunk,
        size: u64,
        rest: u64,
    ) -> Result<bool, CaptureError> {
        if rest - size < 1 << 32 {
            return Ok(false);
        }
        let next = self.next_chunk(file, chunk.start, size)?;
        Ok(self.read_chunk(file, next)?.is_none())
    }

    /// Reads a `fmt ` chunk of `size` bytes from where the file stands.
    fn read_format<F: Read>(
        self,
        file: &mut F,
        size: u64,
        notes: &mut Vec<String>,
    ) -> Result<Format, CaptureError> {
        let mut buffer = [0; 40];
        let wanted = buffer
            .len()
            .min(usize::try_from(size).unwrap_or(usize::MAX));
        let got = read_up_to(file, buffer.get_mut(..wanted).unwrap_or_default())?;
        let bytes = buffer.get(..got).unwrap_or_default();
        let short = || {
            bad(format!(
                "format chunk of {} (14 are needed)",
                count(got as u64, "byte", "bytes")
            ))
        };
        let mut tag = self.u16(bytes, 0).ok_or_else(short)?;
        let mut channels = self.u16(bytes, 2).ok_or_else(short)?;
        let mut rate_hz = self.u32(bytes, 4).ok_or_else(short)?;
        let byte_rate = self.u32(bytes, 8).ok_or_else(short)?;
        let frame = self.u16(bytes, 12).ok_or_else(short)?;
        // The oldest headers end before the bits.
        let mut bits = self.u16(bytes, 14).unwrap_or(0);
        if bits == 0 && channels > 0 && frame > 0 && frame.is_multiple_of(channels) {
            bits = (frame / channels).saturating_mul(8);
            notes.push(format!(
                "no bits per sample in the header: {bits} taken from the frame size of {}",
                count(frame.into(), "byte", "bytes")
            ));
        }
        if channels == 0 && bits > 0 && frame > 0 && frame.is_multiple_of(bits.div_ceil(8)) {
            channels = frame / bits.div_ceil(8);
            notes.push(format!(
                "0 channels in the header: {channels} taken from the frame size of {}",
                count(frame.into(), "byte", "bytes")
            ));
        }
        let mut valid_bits = bits;
        const EXTENSIBLE: u16 = 0xFFFE;
        if tag == EXTENSIBLE {
            let cut = || {
                bad(format!(
                    "extensible format chunk of {} (40 are needed)",
                    count(got as u64, "byte", "bytes")
                ))
            };
            // A writer that leaves the valid bits 0 means all of them.
            valid_bits = self
                .u16(bytes, 18)
                .filter(|&n| n > 0 && n <= bits)
                .unwrap_or(bits);
            // KSDATAFORMAT_SUBTYPE_*: a coding number of 32 bits made a GUID,
            // whose first three numbers are in the order of the file.
            let (at, tail): (usize, &[u8]) = if self.big {
                (26, b"\x00\x00\x00\x10\x80\x00\x00\xAA\x00\x38\x9B\x71")
            } else {
                (24, b"\x00\x00\x10\x00\x80\x00\x00\xAA\x00\x38\x9B\x71")
            };
            tag = self.u16(bytes, at).ok_or_else(cut)?;
            let padding = self.u16(bytes, 50 - at).ok_or_else(cut)?;
            if padding != 0 || bytes.get(28..40).ok_or_else(cut)? != tail {
                let coding = "an unknown extensible sample coding".into();
                return Err(CaptureError::UnsupportedCoding { coding });
            }
        }
        let coding = match tag {
            1 => Coding::Integer,
            3 => Coding::Float,
            6 => Coding::ALaw,
            7 => Coding::MuLaw,
            _ => {
                return Err(CaptureError::UnsupportedCoding {
                    coding: coding_name(tag),
                });
            }
        };
        if channels == 0 {
            return Err(bad("0 channels".into()));
        }
        super::limit_channels(channels.into())?;
        if bits == 0 {
            return Err(bad("0 bits per sample".into()));
        }
        // The container is what the frame size says, if that is possible.
        let least = bits.div_ceil(8);
        let width = match frame / channels {
            width
                if frame % channels == 0
                    && (width == least || width > least && matches!(width, 2 | 3 | 4 | 8)) =>
            {
                width
            }
            _ => {
                notes.push(format!(
                    "impossible frame size of {}: taken as {}",
                    count(frame.into(), "byte", "bytes"),
                    u32::from(least) * u32::from(channels)
                ));
                least
            }
        };
        let supported = match coding {
            Coding::Integer => (1..=64).contains(&bits) && (1..=8).contains(&width),
            Coding::Float => matches!((bits, width), (32, 4) | (64, 8)),
            Coding::ALaw | Coding::MuLaw => bits == 8 && width == 1,
        };
        if !supported {
            let kind = match coding {
                Coding::Float => "float",
                Coding::Integer => "integer",
                Coding::ALaw => "A-law",
                Coding::MuLaw => "mu-law",
            };
            let coding = format!(
                "{bits}-bit {kind} samples in {}",
                count(width.into(), "byte", "bytes")
            );
            return Err(CaptureError::UnsupportedCoding { coding });
        }
        let frame = u32::from(width) * u32::from(channels);
        if rate_hz == 0 && byte_rate > 0 && byte_rate.is_multiple_of(frame) {
            rate_hz = byte_rate / frame;
            notes.push(format!(
                "sample rate 0 in the header: {rate_hz} Hz taken from the byte rate {byte_rate}"
            ));
        }
        let true_rate = u64::from(rate_hz) * u64::from(frame);
        if u64::from(byte_rate) != true_rate {
            notes.push(format!("byte rate {byte_rate} does not fit the sample rate {rate_hz} Hz: the sample rate was taken"));
        }
        Ok(Format {
            coding,
            channels,
            rate_hz,
            valid_bits,
            width,
        })
    }
}

/// Names of the format codes met most, from the registry in RFC 2361.
fn coding_name(tag: u16) -> String {
    let name = match tag {
        0x0002 | 0x0011 => "ADPCM-compressed samples",
        0x0031 => "GSM-compressed samples",
        0x0050 | 0x0055 => "MPEG-compressed samples",
        _ => return format!("the unknown sample coding 0x{tag:04X}"),
    };
    name.into()
}

/// Size of the data chunk from a `ds64` chunk (RIFF size, data size, …).
fn read_ds64<F: Read>(file: &mut F) -> Result<Option<u64>, CaptureError> {
    let mut buffer = [0; 16];
    let got = read_up_to(file, &mut buffer)?;
    Ok(buffer
        .get(..got)
        .and_then(|bytes| Order { big: false }.u64(bytes, 8)))
}

/// Start of the recording from a broadcast extension chunk (EBU Tech 3285).
fn read_bext<F: Read>(file: &mut F, size: u64) -> Result<Option<String>, CaptureError> {
    const DATE: usize = 320;
    let mut buffer = [0; 338];
    if size < buffer.len() as u64 || read_up_to(file, &mut buffer)? < buffer.len() {
        return Ok(None);
    }
    let text = |from: usize, to: usize| {
        let bytes = buffer.get(from..to).unwrap_or_default();
        super::error::excerpt(bytes.split(|&b| b == 0).next().unwrap_or_default())
    };
    let (date, time) = (text(DATE, DATE + 10), text(DATE + 10, DATE + 18));
    Ok((!date.is_empty()).then(|| {
        format!(
            "recording started {} {}",
            date.escape_debug(),
            time.escape_debug()
        )
    }))
}
