//! The spectrum as a picture of its own.

use super::SpectrumPicture;
use crate::report::page::letters::Letters;
use crate::report::page::palette;
use crate::report::page::triage::tone_views;
use crate::triage::Triage;
use askama::Template;
use resvg::{tiny_skia, usvg};
use std::io::{self, Write};
use std::sync::Arc;

/// Pixels of a PNG for each unit of the picture.
const SCALE: f32 = 2.0;

/// Why a picture could not be drawn.
#[derive(Debug, thiserror::Error)]
pub enum PictureError {
    /// Writing failed.
    #[error(transparent)]
    Io(#[from] io::Error),
    /// The template failed.
    #[error("cannot draw the picture: {0}")]
    Template(#[from] askama::Error),
    /// The drawing cannot be turned into pixels.
    #[error("cannot turn the picture into pixels: {what}")]
    Pixels {
        /// What stands in the way.
        what: String,
    },
}

fn svg(result: &Triage) -> Result<String, PictureError> {
    let tones = tone_views(result, &Letters::of(&[result]), 1, "");
    let mut picture = SpectrumPicture::new(result, &tones, "");
    picture.style = Some(palette::by_day(crate::report::page::PICTURE_STYLE));
    Ok(picture.render()?)
}

/// Writes the spectrum with its tones as SVG.
///
/// # Errors
/// If `out` cannot be written.
pub fn write_svg(result: &Triage, out: &mut dyn Write) -> Result<(), PictureError> {
    out.write_all(svg(result)?.as_bytes())?;
    Ok(out.flush()?)
}

/// Writes the same as PNG, 2240 pixels wide. Lettering is in a font that the program
/// carries (Ubuntu Light), so that it looks alike everywhere; characters which that
/// font lacks are left out.
///
/// # Errors
/// If `out` cannot be written, or the drawing cannot be turned into pixels.
pub fn write_png(result: &Triage, out: &mut dyn Write) -> Result<(), PictureError> {
    let pixels = |what: &dyn std::fmt::Display| PictureError::Pixels {
        what: what.to_string(),
    };
    let mut fonts = usvg::fontdb::Database::new();
    fonts.load_font_data(epaint_default_fonts::UBUNTU_LIGHT.to_vec());
    let family = fonts
        .faces()
        .find_map(|face| face.families.first())
        .map(|(name, _)| name.clone())
        .unwrap_or_default();
    // Whatever family the style asks for, there is only this one.
    fonts.set_sans_serif_family(&family);
    fonts.set_serif_family(&family);
    let options = usvg::Options {
        font_family: family,
        fontdb: Arc::new(fonts),
        ..usvg::Options::default()
    };
    let tree = usvg::Tree::from_str(&svg(result)?, &options).map_err(|e| pixels(&e))?;
    let size = tree.size();
    let (width, height) = (size.width() * SCALE, size.height() * SCALE);
    let mut map = tiny_skia::Pixmap::new(width.ceil() as u32, height.ceil() as u32)
        .ok_or_else(|| pixels(&"it is too large"))?;
    resvg::render(
        &tree,
        tiny_skia::Transform::from_scale(SCALE, SCALE),
        &mut map.as_mut(),
    );
    out.write_all(&map.encode_png().map_err(|e| pixels(&e))?)?;
    Ok(out.flush()?)
}
