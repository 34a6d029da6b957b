//! The report page: one file that shows a result to someone who was not there.
//!
//! A page needs nothing beside it: style, script and pictures are inside, and its
//! content policy lets it load nothing. Templates escape whatever they are given;
//! [`plain`](super::text::plain) has been through every name before, so that marks
//! which reorder text do not come either. Without a script everything can still be
//! read; the script sorts, filters and points.
//!
//! `layout.html` is what all pages share: head, style, the record at the end. A
//! command has a template of its own that fills its blocks, and a view that formats
//! what the template shows:
//!
//! | file | shows |
//! |---|---|
//! | `triage` | recordings, each with pictures, tones, sources and what was assumed |
//! | `pictures` | spectrum, folded axis, tracks: places of marks, drawn by SVG templates |
//! | `verdicts` | what was found, in plain sentences |
//! | `assumed` | what the result rests on |
//! | `next` | the planned test, and general advice |
//! | `letters` | the letter that stands for a source in every picture and table |
//! | `record` | version, command line, digests of the inputs |
//! | `palette` | the colours, light and dark, of pages and pictures |

mod assumed;
mod letters;
mod next;
mod palette;
mod pictures;
mod record;
mod triage;
mod verdicts;

pub use next::Planned;
pub use pictures::{PictureError, write_png, write_svg};
pub use record::{Input, Record, command_line};
pub use triage::{Failed, Subject, write_triage};

use askama::Template;
use base64::{Engine, prelude::BASE64_STANDARD};
use sha2::{Digest, Sha256};
use std::io;

const STYLE: &str = include_str!("page.css");
const PICTURE_STYLE: &str = include_str!("pictures/picture.css");
const SCRIPT: &str = include_str!("page.js");

/// What the layout itself needs: style and script with the digests that the page's
/// content policy names, so that nothing else in the page can run.
struct Frame {
    style: String,
    style_digest: String,
    script: &'static str,
    script_digest: String,
}

impl Frame {
    fn new() -> Self {
        let style = format!("{}{PICTURE_STYLE}{STYLE}", palette::variables());
        Frame {
            style_digest: digest(&style),
            style,
            script: SCRIPT,
            script_digest: digest(SCRIPT),
        }
    }
}

/// As a content policy writes it: `sha256-` and the digest in base 64.
fn digest(text: &str) -> String {
    format!("sha256-{}", BASE64_STANDARD.encode(Sha256::digest(text)))
}

/// A number of the picture's units, to a tenth.
struct Px(f64);

impl std::fmt::Display for Px {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let tenths = (self.0 * 10.0).round();
        if tenths % 10.0 == 0.0 {
            write!(f, "{:.0}", tenths / 10.0)
        } else {
            write!(f, "{:.1}", tenths / 10.0)
        }
    }
}

/// A number as people write it, with a minus sign that is not a hyphen.
fn signed(value: f64, decimals: usize) -> String {
    format!("{value:.decimals$}").replace('-', "−")
}

fn write(template: &impl Template, out: &mut dyn io::Write) -> io::Result<()> {
    Template::write_into(template, out)?;
    out.flush()
}
