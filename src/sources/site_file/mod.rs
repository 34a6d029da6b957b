//! Reading a site file: TOML, or a plain list of names and frequencies.
//!
//! Text becomes [`Entry`]s (descriptions with the lines they stood on), and these
//! are linked into a [`super::Catalogue`] once every name is known, so that a
//! motor may name a drive listed after it.

mod link;
mod list;
mod recorder;
mod source;
mod table;

use super::{Kind, Site, SiteError, bearing, clock, drive, gear, mains, motor, shaft, tone};
use std::io::Read;
use std::path::Path;

/// Most lines that one source may list.
pub const MAX_LINES_PER_SOURCE: u32 = 10_000;
/// Most lines that a whole site may list.
const MAX_LINES: u64 = 200_000;
/// Longest site file, bytes.
const MAX_BYTES: u64 = 8 << 20;

/// A described source that is not yet linked to the others.
struct Entry {
    /// Line of its `[[source]]`, or of its row.
    line: usize,
    /// Line of its name.
    name_line: usize,
    description: Description,
}

/// A name of another source and the line it stood on.
struct Reference {
    name: String,
    line: usize,
}

enum Supply {
    Own {
        hz: f64,
        tolerance: super::quantity::Tolerance,
    },
    FedBy(Reference),
}

enum Description {
    Mains(mains::Mains),
    Shaft(shaft::Shaft),
    Clock(clock::Clock),
    Drive(drive::Drive),
    Motor {
        motor: motor::Motor,
        supply: Supply,
        /// Where the nameplate's frequency was not given: the line of `rpm`. It is
        /// settled once the supply is known.
        rpm_line: Option<usize>,
    },
    Gear {
        gear: gear::Gear,
        on: Reference,
    },
    Bearing {
        bearing: bearing::Bearing,
        on: Reference,
    },
    Tone(tone::Tone),
}

impl Entry {
    fn name(&self) -> &str {
        match &self.description {
            Description::Mains(d) => &d.name,
            Description::Shaft(d) => &d.name,
            Description::Clock(d) => &d.name,
            Description::Drive(d) => &d.name,
            Description::Motor { motor, .. } => &motor.name,
            Description::Gear { gear, .. } => &gear.name,
            Description::Bearing { bearing, .. } => &bearing.name,
            Description::Tone(d) => &d.name,
        }
    }

    /// How many lines it expands to, at most.
    fn most_lines(&self) -> u64 {
        match &self.description {
            Description::Mains(d) => u64::from(d.orders),
            Description::Shaft(d) => u64::from(d.orders) + u64::from(shaft::VANE_MULTIPLES),
            Description::Clock(d) => {
                let sidebands = d.sidebands.as_ref().map_or(0, |s| u64::from(s.count));
                u64::from(d.orders) * (1 + 2 * sidebands)
            }
            Description::Drive(d) => drive::line_count(d.orders),
            // Fixed families, none as long as this.
            Description::Motor { .. } | Description::Gear { .. } | Description::Bearing { .. } => {
                50
            }
            Description::Tone(_) => 1,
        }
    }

    fn kind(&self) -> Kind {
        match &self.description {
            Description::Mains(_) => Kind::Mains,
            Description::Shaft(_) => Kind::Shaft,
            Description::Clock(_) => Kind::Clock,
            Description::Drive(_) => Kind::Drive,
            Description::Motor { .. } => Kind::Motor,
            Description::Gear { .. } => Kind::Gear,
            Description::Bearing { .. } => Kind::Bearing,
            Description::Tone(_) => Kind::Tone,
        }
    }
}

impl Site {
    /// Reads a site file.
    ///
    /// A file whose first line with anything on it is a heading with the columns
    /// `name` and `hz`, or whose name ends in `.csv` or `.tsv`, is read as a plain
    /// list; anything else as TOML. See [`Site::from_toml`] and [`Site::from_list`].
    ///
    /// # Errors
    /// Whatever is wrong, with its line and key; see [`SiteError`].
    pub fn load(path: &Path) -> Result<Site, SiteError> {
        let file = std::fs::File::open(path).map_err(|source| SiteError::Read { source })?;
        let mut bytes = Vec::new();
        file.take(MAX_BYTES + 1)
            .read_to_end(&mut bytes)
            .map_err(|source| SiteError::Read { source })?;
        if bytes.len() as u64 > MAX_BYTES {
            return Err(SiteError::TooLong { limit: MAX_BYTES });
        }
        let text = String::from_utf8(bytes).map_err(|error| {
            let good = error.utf8_error().valid_up_to();
            SiteError::NotUtf8 {
                line: Lines::of(error.as_bytes()).at(good),
            }
        })?;
        let named_as_list = path
            .extension()
            .and_then(|extension| extension.to_str())
            .is_some_and(|extension| {
                ["csv", "tsv"]
                    .iter()
                    .any(|list| extension.eq_ignore_ascii_case(list))
            });
        if named_as_list || list::is_list(&text) {
            Site::from_list(&text)
        } else {
            Site::from_toml(&text)
        }
    }

    /// Reads a site file's TOML: tables `[recorder]` and `[[source]]`. Where no
    /// `source` is listed, the built-in ones stand in.
    ///
    /// # Errors
    /// Whatever is wrong, with its line and key; see [`SiteError`].
    pub fn from_toml(text: &str) -> Result<Site, SiteError> {
        let text = without_mark(text);
        let lines = Lines::of(text.as_bytes());
        let document = table::parse(text, &lines)?;
        let root = table::Table::root(&lines, document.get_ref());
        root.allow(&["recorder", "source"])?;
        let recorder = match root.table("recorder")? {
            Some(table) => Some(recorder::read(&table)?),
            None => None,
        };
        let catalogue = match (root.tables("source")?, &recorder) {
            (Some(tables), _) => {
                let entries = tables.iter().map(source::read).collect::<Result<_, _>>()?;
                link::link(entries)?
            }
            (None, Some(_)) => Site::builtin().catalogue,
            (None, None) => return Err(SiteError::Empty),
        };
        Ok(Site {
            catalogue,
            recorder: recorder.unwrap_or_default(),
        })
    }

    /// Reads a plain list: CSV with comma, semicolon or tab, a heading, and the
    /// columns `name`, `hz` and, where wanted, `tolerance` and `orders`. A row of one
    /// order (or none given) is a `tone`; one of more is a `clock` that may wander.
    /// Tolerance ±1 % where none is given. Lines that start with `#` are comments.
    ///
    /// # Errors
    /// Whatever is wrong, with its line and column; see [`SiteError`].
    pub fn from_list(text: &str) -> Result<Site, SiteError> {
        Ok(Site {
            catalogue: link::link(list::read(without_mark(text))?)?,
            recorder: super::Recorder::default(),
        })
    }
}

/// Drops a byte order mark.
fn without_mark(text: &str) -> &str {
    text.strip_prefix('\u{feff}').unwrap_or(text)
}

/// Where the lines of a text start, to find the line of a byte.
struct Lines {
    /// Offset past each newline, rising.
    starts: Vec<usize>,
}

impl Lines {
    fn of(text: &[u8]) -> Self {
        let newlines = text.iter().enumerate().filter(|&(_, &byte)| byte == b'\n');
        Lines {
            starts: newlines.map(|(at, _)| at + 1).collect(),
        }
    }

    /// The line, from 1, of a byte.
    fn at(&self, offset: usize) -> usize {
        1 + self.starts.partition_point(|&start| start <= offset)
    }
}
