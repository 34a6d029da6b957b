//! One `[[source]]` table.

use super::table::{Table, out_of_range};
use super::{Description, Entry, MAX_LINES_PER_SOURCE, Reference, Supply};
use crate::sources::Kind;
use crate::sources::bearing::{self, Bearing};
use crate::sources::clock::{self, Clock, Sidebands};
use crate::sources::drive::{self, Drive};
use crate::sources::error::{Problem, SiteError, nearest, shown};
use crate::sources::gear::Gear;
use crate::sources::mains::{self, Mains};
use crate::sources::motor::{self, Motor, Speed};
use crate::sources::quantity::{MAX_HZ, MIN_HZ, SLIP_EXAMPLES, Tolerance, check_slip, parse_slip};
use crate::sources::shaft::{self, Shaft};
use crate::sources::tone::{self, Tone};
use crate::units::U95;

/// Counts of teeth, bars, vanes and balls.
const MAX_COUNT: u32 = 10_000;

/// What is common to every kind, with the table it came from.
struct Reader<'a> {
    table: &'a Table<'a>,
    kind: Kind,
    name: String,
}

pub(super) fn read(table: &Table<'_>) -> Result<Entry, SiteError> {
    let word = table
        .text("kind")?
        .ok_or_else(|| table.missing("kind", "a source"))?;
    let kind = Kind::ALL
        .into_iter()
        .find(|kind| kind.as_str() == word)
        .ok_or_else(|| {
            let known: Vec<&'static str> = Kind::ALL.map(Kind::as_str).to_vec();
            table.error(
                "kind",
                Problem::UnknownWord {
                    what: "kind",
                    got: shown(word),
                    nearest: nearest(word, known.iter().copied()),
                    known,
                },
            )
        })?;
    table.allow(keys(kind))?;
    let name = table
        .text("name")?
        .ok_or_else(|| table.missing("name", "a source"))?
        .to_owned();
    let reader = Reader { table, kind, name };
    let description = match kind {
        Kind::Mains => Description::Mains(reader.mains()?),
        Kind::Shaft => Description::Shaft(reader.shaft()?),
        Kind::Clock => Description::Clock(reader.clock()?),
        Kind::Drive => Description::Drive(reader.drive()?),
        Kind::Motor => reader.motor()?,
        Kind::Gear => reader.gear()?,
        Kind::Bearing => reader.bearing()?,
        Kind::Tone => Description::Tone(reader.tone()?),
    };
    Ok(Entry {
        line: table.line,
        name_line: table.line_of_key("name"),
        description,
    })
}

fn keys(kind: Kind) -> &'static [&'static str] {
    match kind {
        Kind::Mains => &["name", "kind", "hz", "tolerance", "orders"],
        Kind::Shaft => &["name", "kind", "rpm", "hz", "tolerance", "orders", "vanes"],
        Kind::Clock => &[
            "name",
            "kind",
            "hz",
            "tolerance",
            "orders",
            "sideband_hz",
            "sideband_tolerance",
            "sidebands",
        ],
        Kind::Drive => &[
            "name",
            "kind",
            "carrier_hz",
            "carrier_tolerance",
            "output_hz",
            "output_tolerance",
            "tolerance",
            "orders",
        ],
        Kind::Motor => &[
            "name",
            "kind",
            "mains_hz",
            "mains_tolerance",
            "fed_by",
            "poles",
            "rpm",
            "tolerance",
            "slip",
            "rotor_bars",
        ],
        Kind::Gear => &["name", "kind", "teeth", "on", "ratio"],
        Kind::Bearing => &[
            "name",
            "kind",
            "on",
            "balls",
            "ball_mm",
            "pitch_mm",
            "angle_deg",
            "tolerance",
        ],
        Kind::Tone => &["name", "kind", "hz", "tolerance"],
    }
}

impl Reader<'_> {
    fn need<T>(&self, value: Option<T>, key: &str) -> Result<T, SiteError> {
        value.ok_or_else(|| {
            let needed_by = format!("kind `{}`", self.kind);
            self.table.missing(key, &needed_by)
        })
    }

    fn hz(&self, key: &str) -> Result<f64, SiteError> {
        self.need(self.table.hz(key)?, key)
    }

    /// The tolerance under `key`, or the default.
    fn tolerance(
        &self,
        key: &str,
        nominal_hz: f64,
        default: Tolerance,
    ) -> Result<Tolerance, SiteError> {
        let own = self.table.tolerance(key, nominal_hz)?;
        Ok(own.unwrap_or(default))
    }

    fn orders(&self, default: u32, most: u32) -> Result<u32, SiteError> {
        Ok(self.table.whole("orders", 1, most)?.unwrap_or(default))
    }

    fn conflict(&self, key: &str, other: &'static str) -> Result<(), SiteError> {
        if self.table.has(key) && self.table.has(other) {
            Err(self.table.error(key, Problem::Conflict { other }))
        } else {
            Ok(())
        }
    }

    fn reference(&self, key: &str) -> Result<Reference, SiteError> {
        Ok(Reference {
            name: self.need(self.table.text(key)?, key)?.to_owned(),
            line: self.table.line_of_key(key),
        })
    }

    fn mains(self) -> Result<Mains, SiteError> {
        let hz = self.hz("hz")?;
        Ok(Mains {
            hz,
            tolerance: self.tolerance("tolerance", hz, mains::TOLERANCE)?,
            orders: self.orders(mains::ORDERS, MAX_LINES_PER_SOURCE)?,
            name: self.name,
        })
    }

    fn shaft(self) -> Result<Shaft, SiteError> {
        self.conflict("rpm", "hz")?;
        let hz = match self.rpm()? {
            Some(rpm) => rpm / 60.0,
            None if self.table.has("hz") => self.hz("hz")?,
            None => return self.need(None, "rpm"),
        };
        Ok(Shaft {
            hz,
            tolerance: self.tolerance("tolerance", hz, shaft::TOLERANCE)?,
            orders: self.orders(shaft::ORDERS, MAX_LINES_PER_SOURCE - shaft::VANE_MULTIPLES)?,
            vanes: self.table.whole("vanes", 1, MAX_COUNT)?,
            name: self.name,
        })
    }

    fn rpm(&self) -> Result<Option<f64>, SiteError> {
        self.table.between("rpm", 60.0 * MIN_HZ, 60.0 * MAX_HZ)
    }

    fn clock(self) -> Result<Clock, SiteError> {
        let hz = self.hz("hz")?;
        let tolerance = self.tolerance("tolerance", hz, clock::TOLERANCE)?;
        let orders = self.orders(clock::ORDERS, MAX_LINES_PER_SOURCE)?;
        Ok(Clock {
            hz,
            tolerance,
            steadiness: clock::steadiness(hz, tolerance),
            orders,
            sidebands: self.sidebands(orders)?,
            name: self.name,
        })
    }

    fn sidebands(&self, orders: u32) -> Result<Option<Sidebands>, SiteError> {
        let Some(hz) = self.table.hz("sideband_hz")? else {
            return match ["sidebands", "sideband_tolerance"]
                .into_iter()
                .find(|key| self.table.has(key))
            {
                Some(key) => Err(SiteError::key(
                    self.table.line_of_key(key),
                    "sideband_hz",
                    Problem::Missing {
                        needed_by: format!("`{key}`"),
                    },
                )),
                None => Ok(None),
            };
        };
        // Each order has one line and this many on each side.
        let most = (MAX_LINES_PER_SOURCE / orders).saturating_sub(1) / 2;
        let count = self
            .table
            .whole("sidebands", 1, MAX_LINES_PER_SOURCE)?
            .unwrap_or(clock::SIDEBANDS);
        if count > most {
            return Err(self.table.error(
                "sidebands",
                Problem::OutOfRange {
                    wanted: format!(
                        "at most {most} beside {orders} orders (a source may list {MAX_LINES_PER_SOURCE} lines)"
                    ),
                    got: count.to_string(),
                },
            ));
        }
        Ok(Some(Sidebands {
            hz,
            tolerance: self.tolerance("sideband_tolerance", hz, clock::SIDEBAND_TOLERANCE)?,
            count,
        }))
    }

    fn drive(self) -> Result<Drive, SiteError> {
        let carrier_hz = self.hz("carrier_hz")?;
        let output_hz = self.hz("output_hz")?;
        // A plain `tolerance` is of both, where they have none of their own.
        let plain = |hz: f64, default| self.tolerance("tolerance", hz, default);
        let carrier = plain(carrier_hz, drive::CARRIER_TOLERANCE)?;
        let output = plain(output_hz, drive::OUTPUT_TOLERANCE)?;
        let orders = self.orders(drive::ORDERS, MAX_LINES_PER_SOURCE)?;
        if drive::line_count(orders) > u64::from(MAX_LINES_PER_SOURCE) {
            let most = (1..=orders)
                .rev()
                .find(|&orders| drive::line_count(orders) <= u64::from(MAX_LINES_PER_SOURCE));
            let problem = out_of_range(1.0, f64::from(most.unwrap_or(1)), &orders.to_string());
            return Err(self.table.error("orders", problem));
        }
        Ok(Drive {
            carrier_hz,
            carrier_tolerance: self.tolerance("carrier_tolerance", carrier_hz, carrier)?,
            output_hz,
            output_tolerance: self.tolerance("output_tolerance", output_hz, output)?,
            orders,
            name: self.name,
        })
    }

    fn motor(self) -> Result<Description, SiteError> {
        self.conflict("slip", "rpm")?;
        self.conflict("slip", "tolerance")?;
        self.conflict("mains_tolerance", "fed_by")?;
        let mains_hz = self.table.hz("mains_hz")?;
        let supply = match (self.table.has("fed_by"), mains_hz) {
            (true, _) => Supply::FedBy(self.reference("fed_by")?),
            (false, Some(hz)) => Supply::Own {
                hz,
                tolerance: self.tolerance("mains_tolerance", hz, motor::SUPPLY_TOLERANCE)?,
            },
            (false, None) => return self.need(None, "mains_hz"),
        };
        let poles = self.need(self.table.whole("poles", 2, 1000)?, "poles")?;
        if poles % 2 != 0 {
            return Err(self.table.error(
                "poles",
                Problem::OutOfRange {
                    wanted: "an even number (poles come in pairs)".to_owned(),
                    got: poles.to_string(),
                },
            ));
        }
        let mut rpm_line = None;
        let speed = match (self.slip()?, self.rpm()?) {
            (Some((low, high)), _) => Speed::Slip { low, high },
            (None, Some(rpm)) => {
                let at_hz = mains_hz.unwrap_or(0.0);
                if mains_hz.is_some() {
                    self.check_nameplate(rpm, at_hz, poles)?;
                } else {
                    rpm_line = Some(self.table.line_of_key("rpm"));
                }
                Speed::Nameplate {
                    rpm,
                    at_hz,
                    tolerance: self.table.tolerance("tolerance", rpm / 60.0)?,
                }
            }
            (None, None) => {
                let needed_by = "kind `motor` (or a range of `slip`)";
                return Err(self.table.missing("rpm", needed_by));
            }
        };
        let rotor_bars = self.table.whole("rotor_bars", 2, MAX_COUNT)?;
        Ok(Description::Motor {
            motor: Motor {
                name: self.name,
                poles,
                speed,
                rotor_bars,
            },
            supply,
            rpm_line,
        })
    }

    fn check_nameplate(&self, rpm: f64, at_hz: f64, poles: u32) -> Result<(), SiteError> {
        match nameplate_problem(rpm, at_hz, poles) {
            Some(problem) => Err(self.table.error("rpm", problem)),
            None => Ok(()),
        }
    }

    fn slip(&self) -> Result<Option<(f64, f64)>, SiteError> {
        let result = match self.table.numbers("slip") {
            Ok(None) => return Ok(None),
            Ok(Some(range)) => match *range.as_slice() {
                [low, high] => check_slip(low, high, &format!("{range:?}")),
                _ => Err(Problem::WrongType {
                    wanted: "two numbers",
                    got: format!("{} (write {SLIP_EXAMPLES})", range.len()),
                }),
            },
            Err(not_numbers) => match self.table.text("slip") {
                Ok(Some(text)) => parse_slip(text),
                _ => return Err(not_numbers),
            },
        };
        result
            .map(Some)
            .map_err(|problem| self.table.error("slip", problem))
    }

    fn gear(self) -> Result<Description, SiteError> {
        let teeth = self.need(self.table.whole("teeth", 1, MAX_COUNT)?, "teeth")?;
        let on = self.reference("on")?;
        let ratio = self.table.between("ratio", 1e-6, 1e6)?.unwrap_or(1.0);
        Ok(Description::Gear {
            gear: Gear {
                name: self.name,
                teeth,
                ratio,
            },
            on,
        })
    }

    fn bearing(self) -> Result<Description, SiteError> {
        let on = self.reference("on")?;
        let balls = self.need(self.table.whole("balls", 2, MAX_COUNT)?, "balls")?;
        let ball_mm = self.need(self.table.between("ball_mm", 1e-3, 1e6)?, "ball_mm")?;
        let pitch_mm = self.need(self.table.between("pitch_mm", 1e-3, 1e6)?, "pitch_mm")?;
        let room = std::f64::consts::PI * pitch_mm / ball_mm;
        if ball_mm >= pitch_mm || f64::from(balls) > room {
            return Err(self.table.error(
                "ball_mm",
                Problem::OutOfRange {
                    wanted: format!(
                        "such that {balls} balls fit on a pitch circle of {pitch_mm} mm"
                    ),
                    got: ball_mm.to_string(),
                },
            ));
        }
        let angle_deg = self.table.finite("angle_deg")?.unwrap_or(0.0);
        if !(0.0..90.0).contains(&angle_deg) {
            return Err(self.table.error(
                "angle_deg",
                Problem::OutOfRange {
                    wanted: "from 0 to below 90 degrees".to_owned(),
                    got: angle_deg.to_string(),
                },
            ));
        }
        Ok(Description::Bearing {
            bearing: Bearing {
                name: self.name.clone(),
                balls,
                ball_mm,
                pitch_mm,
                angle_deg,
                slip_sd: self.bearing_slip()?,
            },
            on,
        })
    }

    /// A bearing has no latent of its own: its tolerance is of each of its lines,
    /// and so must be relative.
    fn bearing_slip(&self) -> Result<f64, SiteError> {
        match self.table.tolerance("tolerance", 1.0)? {
            None => Ok(bearing::SLIP_SD),
            Some(Tolerance::Relative(r)) => Ok(r / U95),
            Some(Tolerance::Hz(_)) => Err(self.table.error(
                "tolerance",
                Problem::OutOfRange {
                    wanted: "in % or ppm for a bearing (it is of every line)".to_owned(),
                    got: "Hz".to_owned(),
                },
            )),
        }
    }

    fn tone(self) -> Result<Tone, SiteError> {
        let hz = self.hz("hz")?;
        Ok(Tone {
            hz,
            tolerance: self.tolerance("tolerance", hz, tone::TOLERANCE)?,
            name: self.name,
        })
    }
}

/// A nameplate's speed must be near the synchronous speed, and is below it for a
/// motor; a little above is a generator, or a rounded plate.
pub(super) fn nameplate_problem(rpm: f64, at_hz: f64, poles: u32) -> Option<Problem> {
    let synchronous_rpm = (600.0 * motor::synchronous_hz(at_hz, poles)).round() / 10.0;
    if (0.5..=1.1).contains(&(rpm / 60.0 / motor::synchronous_hz(at_hz, poles))) {
        return None;
    }
    Some(Problem::OutOfRange {
        wanted: format!(
            "near the synchronous speed {synchronous_rpm} rpm of {poles} poles at {at_hz} Hz (check `poles`)"
        ),
        got: rpm.to_string(),
    })
}
