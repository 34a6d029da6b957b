//! What kind of file this is, by its first bytes.

use std::fs::File;
use std::io::{Seek, SeekFrom};
use std::path::Path;

use super::error::{CaptureError, excerpt};
use super::flac_head;
use super::riff;
use super::text::Encoding;

/// Bytes that are looked at.
const HEAD: usize = 4096;

/// The kinds of recording.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Kind {
    Wav,
    Flac,
    Text,
}

const UNPACK: &str = "unpack it first";
const CONVERT: &str = "convert it to PCM WAV first";
const EXPORT: &str = "export the samples as CSV";

/// First bytes of formats that are not read, with what they are and what helps.
/// From the formats' own specifications.
const FOREIGN: &[(usize, &[u8], &str, &str)] = &[
    (0, b"\x1F\x8B", "gzip-compressed", UNPACK),
    (
        0,
        b"PK\x03\x04",
        "a zip archive or spreadsheet",
        "unpack it, or save the sheet as CSV",
    ),
    (0, b"PK\x05\x06", "an empty zip archive", UNPACK),
    (4, b"1AY&SY", "bzip2-compressed", UNPACK),
    (0, b"\xFD7zXZ\x00", "xz-compressed", UNPACK),
    (0, b"\x28\xB5\x2F\xFD", "Zstandard-compressed", UNPACK),
    (0, b"7z\xBC\xAF\x27\x1C", "a 7z archive", UNPACK),
    (0, b"ID3\x02", "MP3 audio", CONVERT),
    (0, b"ID3\x03", "MP3 audio", CONVERT),
    (0, b"ID3\x04", "MP3 audio", CONVERT),
    (0, b"\xFF\xFB", "MP3 audio", CONVERT),
    (0, b"\xFF\xF3", "MP3 audio", CONVERT),
    (0, b"\xFF\xF2", "MP3 audio", CONVERT),
    (0, b"\xFF\xFA", "MP3 audio", CONVERT),
    (0, b"\xFF\xF1", "AAC audio", CONVERT),
    (0, b"\xFF\xF9", "AAC audio", CONVERT),
    (0, b"OggS", "Ogg audio", CONVERT),
    (0, b"wvpk", "WavPack audio", CONVERT),
    (4, b"ftyp", "MPEG-4 audio or video", CONVERT),
    (8, b"AIFF", "an AIFF file", CONVERT),
    (8, b"AIFC", "an AIFF file", CONVERT),
    (0, b"caff\x00\x01", "a CAF file", CONVERT),
    (0, b".snd\x00", "an AU file", CONVERT),
    (0, b"riff\x2E\x91\xCF\x11", "a Wave64 file", CONVERT),
    (0, b"RIFX", "a RIFX file of another kind than WAVE", CONVERT),
    (0, b"MThd\x00", "a MIDI file", "it holds notes, not samples"),
    (0, b"\x1A\x45\xDF\xA3", "a Matroska file", CONVERT),
    (0, b"RIFF", "a RIFF file of another kind than WAVE", CONVERT),
    (
        0,
        b"RF64",
        "an RF64 file of another kind than WAVE",
        CONVERT,
    ),
    (0, b"MATLAB 5.0 MAT-file", "a MAT-file", EXPORT),
    (0, b"\x89HDF", "an HDF5 file", EXPORT),
    (0, b"TDSm", "a TDMS file", EXPORT),
    (
        0,
        b"\xD0\xCF\x11\xE0",
        "an old spreadsheet or document",
        EXPORT,
    ),
    (0, b"PAR1\x15", "a Parquet file", EXPORT),
    (0, b"SQLite format 3\x00", "a database", EXPORT),
    (0, b"%PDF", "a PDF document", EXPORT),
    (0, b"\x89PNG", "a picture", EXPORT),
    (0, b"\xFF\xD8\xFF", "a picture", EXPORT),
    (0, b"GIF8", "a picture", EXPORT),
    (0, b"\x7FELF", "a program", EXPORT),
    (0, b"<?xml", "an XML document", EXPORT),
    (0, b"<!DOCTYPE", "a web page", EXPORT),
    (0, b"<html", "a web page", EXPORT),
    (0, b"{\\rtf", "a text document", EXPORT),
];

/// Tells WAV from text and names everything else.
pub(super) fn probe(file: &mut File, path: &Path) -> Result<Kind, CaptureError> {
    let mut buffer = [0; HEAD];
    file.seek(SeekFrom::Start(0))?;
    let got = riff::read_up_to(file, &mut buffer)?;
    let named_wav = path.extension().is_some_and(|ext| {
        ["wav", "wave", "rf64", "bwf"]
            .iter()
            .any(|wav| ext.eq_ignore_ascii_case(wav))
    });
    let head = buffer.get(..got).unwrap_or_default();
    // A tag may stand before a FLAC stream; before anything else it is MP3.
    if let Some(length) = flac_head::id3_length(head) {
        let mut magic = [0; 4];
        file.seek(SeekFrom::Start(length))?;
        if riff::read_up_to(file, &mut magic)? == magic.len() && magic == *b"fLaC" {
            return Ok(Kind::Flac);
        }
    }
    kind(head, named_wav)
}

fn kind(head: &[u8], named_wav: bool) -> Result<Kind, CaptureError> {
    if head.is_empty() {
        return Err(CaptureError::Empty);
    }
    if riff::is_wave(head) {
        return Ok(Kind::Wav);
    }
    if head.starts_with(b"fLaC") {
        return Ok(Kind::Flac);
    }
    let starts =
        |at: usize, magic: &[u8]| head.get(at..).is_some_and(|rest| rest.starts_with(magic));
    // Cut off in the first twelve bytes: still a wave file by its start.
    if head.len() < 12 && starts(0, b"RIFF") {
        return Ok(Kind::Wav);
    }
    if let Some(&(_, _, what, help)) = FOREIGN.iter().find(|(at, magic, ..)| starts(*at, magic)) {
        return Err(CaptureError::ForeignFormat { what, help });
    }
    if !Encoding::of(head).is_some_and(|encoding| encoding.looks_like_text(head)) {
        return Err(CaptureError::NotARecording);
    }
    if named_wav {
        return Err(CaptureError::TextNamedWav {
            start: excerpt(head),
        });
    }
    Ok(Kind::Text)
}
