//! The `[recorder]` table.

use super::table::Table;
use crate::frontend::{AntiAlias, Family, FrontEnd};
use crate::sources::Recorder;
use crate::sources::error::{Problem, SiteError, nearest, shown};
use crate::sources::quantity::{MAX_HZ, MIN_HZ, number_and_unit};

const FAMILIES: [&str; 5] = [
    "butterworth",
    "chebyshev1",
    "chebyshev2",
    "elliptic",
    "bessel",
];
const MAX_STAGES: usize = 16;

pub(super) fn read(table: &Table<'_>) -> Result<Recorder, SiteError> {
    table.allow(&[
        "clock_ppm",
        "bandwidth_hz",
        "antialias",
        "aperture_s",
        "stages",
        "full_scale",
    ])?;
    let aperture_s = table.finite("aperture_s")?;
    if let Some(got) = aperture_s.filter(|s| !(0.0..=1e3).contains(s)) {
        return Err(table.error(
            "aperture_s",
            Problem::OutOfRange {
                wanted: "from 0 (none) to 1000 s".to_owned(),
                got: got.to_string(),
            },
        ));
    }
    Ok(Recorder {
        clock_ppm: table.between("clock_ppm", 1e-6, 1e5)?,
        front_end: FrontEnd {
            bandwidth_hz: table.hz("bandwidth_hz")?,
            antialias: match table.table("antialias")? {
                Some(filter) => Some(antialias(&filter)?),
                None => None,
            },
            aperture_s,
        },
        stages_hz: stages(table)?,
        full_scale: full_scale(table)?,
    })
}

fn stages(table: &Table<'_>) -> Result<Vec<f64>, SiteError> {
    let Some(stages) = table.numbers("stages")? else {
        return Ok(Vec::new());
    };
    if let Some(&got) = stages.iter().find(|&&rate| rate <= 0.0) {
        return Err(table.error("stages", Problem::NotPositive { got }));
    }
    let wanted = if stages.is_empty() || stages.len() > MAX_STAGES {
        format!("1 to {MAX_STAGES} rates, the first one first")
    } else if stages.iter().any(|rate| !(MIN_HZ..=MAX_HZ).contains(rate)) {
        format!("rates from {MIN_HZ} to {MAX_HZ} Hz")
    } else {
        return Ok(stages);
    };
    let got = shown(&format!("{stages:?}"));
    Err(table.error("stages", Problem::OutOfRange { wanted, got }))
}

fn full_scale(table: &Table<'_>) -> Result<Option<(f64, String)>, SiteError> {
    let Some(text) = table.text("full_scale")? else {
        return Ok(None);
    };
    match number_and_unit(text) {
        Some((value, _)) if value <= 0.0 => {
            Err(table.error("full_scale", Problem::NotPositive { got: value }))
        }
        Some((value, unit)) if !unit.is_empty() => Ok(Some((value, unit.to_owned()))),
        _ => Err(table.error(
            "full_scale",
            Problem::UnknownUnit {
                got: shown(text),
                examples: "a number and its unit, \"50 m/s^2\" or \"10 V\"",
            },
        )),
    }
}

fn antialias(table: &Table<'_>) -> Result<AntiAlias, SiteError> {
    let word = table
        .text("family")?
        .ok_or_else(|| table.missing("family", "an anti-alias filter"))?;
    let known: &[&'static str] = match word {
        "butterworth" | "bessel" => &["family", "order", "corner_hz"],
        "chebyshev1" => &["family", "order", "corner_hz", "ripple_db"],
        "chebyshev2" => &["family", "order", "corner_hz", "stop_db"],
        "elliptic" => &["family", "order", "corner_hz", "ripple_db", "stop_db"],
        _ => {
            return Err(table.error(
                "family",
                Problem::UnknownWord {
                    what: "family",
                    got: shown(word),
                    nearest: nearest(word, FAMILIES),
                    known: FAMILIES.to_vec(),
                },
            ));
        }
    };
    table.allow(known)?;
    let decibels = |key: &str| {
        let value = table.between(key, 1e-4, 300.0)?;
        value.ok_or_else(|| table.missing(key, &format!("family `{word}`")))
    };
    let family = match word {
        "chebyshev1" => Family::Chebyshev1 {
            ripple_db: decibels("ripple_db")?,
        },
        "chebyshev2" => Family::Chebyshev2 {
            stop_db: decibels("stop_db")?,
        },
        "elliptic" => {
            let (ripple_db, stop_db) = (decibels("ripple_db")?, decibels("stop_db")?);
            if stop_db <= ripple_db {
                return Err(table.error(
                    "stop_db",
                    Problem::OutOfRange {
                        wanted: format!("above ripple_db ({ripple_db})"),
                        got: stop_db.to_string(),
                    },
                ));
            }
            Family::Elliptic { ripple_db, stop_db }
        }
        "bessel" => Family::Bessel,
        _ => Family::Butterworth,
    };
    Ok(AntiAlias {
        family,
        order: table
            .whole("order", 1, 20)?
            .ok_or_else(|| table.missing("order", "an anti-alias filter"))?,
        corner_hz: table
            .hz("corner_hz")?
            .ok_or_else(|| table.missing("corner_hz", "an anti-alias filter"))?,
    })
}
