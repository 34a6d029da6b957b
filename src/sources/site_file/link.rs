//! From descriptions to a catalogue: who shares a latent with whom.

use super::source::nameplate_problem;
use super::{Description, Entry, MAX_LINES, Reference, Supply};
use crate::sources::error::{Problem, SiteError, nearest, shown};
use crate::sources::motor::{self, Speed};
use crate::sources::{Catalogue, Kind, Latent, LatentId, Source, Turning};
use std::collections::HashMap;

/// Names that the results use for something else.
const TAKEN: [&str; 2] = ["unlisted", "recorder"];

pub(super) fn link(mut entries: Vec<Entry>) -> Result<Catalogue, SiteError> {
    let index = by_name(&entries)?;
    check_total(&entries)?;
    let mut latents = Vec::new();
    // What can be ridden on or fed from, and the finished sources, each in the place
    // of its entry.
    let mut latent_of: Vec<Option<LatentId>> = vec![None; entries.len()];
    let mut sources: Vec<Option<Source>> = entries.iter().map(|_| None).collect();

    for ((entry, latent), source) in entries.iter().zip(&mut latent_of).zip(&mut sources) {
        let (own, made) = match &entry.description {
            Description::Mains(d) => with_latent(d.expand(&mut latents)),
            Description::Shaft(d) => with_latent(d.expand(&mut latents)),
            Description::Drive(d) => with_latent(d.expand(&mut latents)),
            Description::Clock(d) => (None, Some(d.expand(&mut latents))),
            Description::Tone(d) => (None, Some(d.expand(&mut latents))),
            Description::Motor { .. } | Description::Gear { .. } | Description::Bearing { .. } => {
                (None, None)
            }
        };
        (*latent, *source) = (own, made);
    }

    let kinds: Vec<Kind> = entries.iter().map(Entry::kind).collect();
    let names: Vec<String> = entries
        .iter()
        .map(|entry| entry.name().to_owned())
        .collect();
    let find =
        |reference: &Reference, key: &'static str| find(&index, &names, &kinds, reference, key);

    for (i, entry) in entries.iter_mut().enumerate() {
        let Description::Motor {
            motor,
            supply,
            rpm_line,
        } = &mut entry.description
        else {
            continue;
        };
        let supply = match supply {
            Supply::Own { hz, tolerance } => motor.own_supply(*hz, *tolerance, &mut latents),
            Supply::FedBy(reference) => {
                let feeder = find(reference, "fed_by")?;
                let Some(supply) = latent_of.get(feeder.at).copied().flatten() else {
                    continue;
                };
                if let (Some(line), Speed::Nameplate { rpm, at_hz, .. }) =
                    (*rpm_line, &mut motor.speed)
                {
                    *at_hz = settle(*rpm, motor.poles, &feeder, &latents, supply)
                        .map_err(|problem| SiteError::key(line, "rpm", problem))?;
                }
                supply
            }
        };
        let (shaft, source) = motor.expand(&mut latents, supply);
        if let Some(slot) = latent_of.get_mut(i) {
            *slot = Some(shaft);
        }
        if let Some(slot) = sources.get_mut(i) {
            *slot = Some(source);
        }
    }

    for (i, entry) in entries.iter().enumerate() {
        let source = match &entry.description {
            Description::Gear { gear, on } => {
                gear.expand(turning(&entries, &latent_of, on, &find)?).1
            }
            Description::Bearing { bearing, on } => {
                bearing.expand(turning(&entries, &latent_of, on, &find)?)
            }
            _ => continue,
        };
        if let Some(slot) = sources.get_mut(i) {
            *slot = Some(source);
        }
    }

    Ok(Catalogue {
        latents,
        sources: sources.into_iter().flatten().collect(),
    })
}

fn with_latent((latent, source): (LatentId, Source)) -> (Option<LatentId>, Option<Source>) {
    (Some(latent), Some(source))
}

fn by_name(entries: &[Entry]) -> Result<HashMap<String, usize>, SiteError> {
    let mut index: HashMap<String, usize> = HashMap::new();
    for (i, entry) in entries.iter().enumerate() {
        let name = entry.name();
        if TAKEN.contains(&name) {
            return Err(SiteError::key(
                entry.name_line,
                "name",
                Problem::OutOfRange {
                    wanted: "another name (the results use this one for something else)".to_owned(),
                    got: format!("`{name}`"),
                },
            ));
        }
        if let Some(first) = index.insert(name.to_owned(), i) {
            return Err(SiteError::key(
                entry.name_line,
                "name",
                Problem::DuplicateName {
                    got: shown(name),
                    first_line: entries.get(first).map_or(1, |first| first.line),
                },
            ));
        }
    }
    Ok(index)
}

/// The source that a reference names.
struct Found {
    at: usize,
    kind: Kind,
}

fn find(
    index: &HashMap<String, usize>,
    names: &[String],
    kinds: &[Kind],
    reference: &Reference,
    key: &'static str,
) -> Result<Found, SiteError> {
    let (fits, wanted): (&[Kind], _) = if key == "fed_by" {
        (&[Kind::Mains, Kind::Drive], "a mains or a drive")
    } else {
        (
            &[Kind::Shaft, Kind::Motor, Kind::Gear],
            "a shaft, a motor or a gear",
        )
    };
    let found = index
        .get(&reference.name)
        .and_then(|&at| kinds.get(at).map(|&kind| Found { at, kind }));
    let problem = match found {
        Some(found) if fits.contains(&found.kind) => return Ok(found),
        Some(found) => Problem::WrongKind {
            got: shown(&reference.name),
            kind: found.kind,
            wanted,
        },
        None => Problem::NoSuchSource {
            got: shown(&reference.name),
            nearest: nearest(&reference.name, names.iter().map(String::as_str)),
        },
    };
    Err(SiteError::key(reference.line, key, problem))
}

/// The frequency that a nameplate's speed is stated for: the mains that feeds the
/// motor, or what fits behind a drive.
fn settle(
    rpm: f64,
    poles: u32,
    feeder: &Found,
    latents: &[Latent],
    supply: LatentId,
) -> Result<f64, Problem> {
    let supply_hz = latents
        .get(supply.0)
        .map_or(0.0, |latent| latent.nominal_hz);
    let fitting = match feeder.kind {
        Kind::Drive => motor::nameplate_hz(rpm, poles, supply_hz),
        _ => None,
    };
    match fitting {
        Some(hz) => Ok(hz),
        None => nameplate_problem(rpm, supply_hz, poles).map_or(Ok(supply_hz), Err),
    }
}

/// How the shaft turns that `entries[rider]` rides on: down the chain of gears to
/// a latent.
fn turning(
    entries: &[Entry],
    latent_of: &[Option<LatentId>],
    on: &Reference,
    find: &impl Fn(&Reference, &'static str) -> Result<Found, SiteError>,
) -> Result<Turning, SiteError> {
    let mut at = find(on, "on")?.at;
    let mut ratio = 1.0;
    // A chain longer than the list goes round in a circle.
    for _ in 0..=entries.len() {
        if let Some(latent) = latent_of.get(at).copied().flatten() {
            return Ok(Turning { latent, ratio });
        }
        let Some(Description::Gear { gear, on }) = entries.get(at).map(|entry| &entry.description)
        else {
            break;
        };
        ratio *= gear.ratio;
        at = find(on, "on")?.at;
    }
    let got = shown(&on.name);
    Err(SiteError::key(on.line, "on", Problem::Cycle { got }))
}

/// Before anything is expanded, so that no file can ask for more memory than this.
fn check_total(entries: &[Entry]) -> Result<(), SiteError> {
    let mut total = 0;
    for entry in entries {
        total += entry.most_lines();
        if total > MAX_LINES {
            return Err(SiteError::key(
                entry.line,
                "source",
                Problem::OutOfRange {
                    wanted: format!("no more than {MAX_LINES} lines in all (lower some `orders`)"),
                    got: format!("{total} up to this source"),
                },
            ));
        }
    }
    Ok(())
}
