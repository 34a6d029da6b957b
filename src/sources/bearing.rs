//! A rolling bearing: its four defect frequencies.
//!
//! For `balls` rolling elements of diameter d on a pitch circle D at contact angle
//! φ, outer ring at rest, inner ring turning at `n`, rolling without slip
//! (Randall & Antoni, *Rolling element bearing diagnostics, a tutorial*, Mechanical
//! Systems and Signal Processing 25, 2011; from memory):
//!
//! - `ftf`, the cage: `n/2·(1 − d/D·cos φ)`
//! - `bpfo`, balls passing a point of the outer ring: `balls·ftf`
//! - `bpfi`, of the inner ring: `balls·n/2·(1 + d/D·cos φ)`
//! - `bsf`, a ball's spin: `n·D/(2d)·(1 − (d/D·cos φ)²)`
//!
//! Lines `1bpfo`…`5bpfo`; `1bpfi`…`5bpfi`, the first three with sidebands `±1x`,
//! `±2x` (the inner ring carries its flaw through the load zone); `1bsf`, `2bsf`,
//! `4bsf` (a flaw on a ball strikes twice a spin), `2bsf±1ftf`; `1ftf`. Balls slip
//! by a per cent or two (the same tutorial), so each line is uncertain by
//! [`SLIP_SD`] of itself beyond the shaft. Weights `k^-1/2` times 1 for the outer
//! ring, 0.8 for the inner, 0.5 for balls, 0.3 for the cage (common practice:
//! outer-ring flaws are found most often).

use super::{Kind, LatentId, Line, Source, Turning, line, signed, source};

/// Relative standard deviation of a defect frequency from slip, where none is given
/// (common practice).
pub const SLIP_SD: f64 = 0.01;

/// Multiples of the ring defect frequencies.
pub const MULTIPLES: u32 = 5;

/// A bearing.
#[derive(Debug, Clone, PartialEq)]
pub struct Bearing {
    /// Name of the source.
    pub name: String,
    /// Count of rolling elements, ≥ 2.
    pub balls: u32,
    /// Their diameter, mm, > 0 and below the pitch diameter.
    pub ball_mm: f64,
    /// Pitch diameter, mm.
    pub pitch_mm: f64,
    /// Contact angle, degrees, in [0, 90).
    pub angle_deg: f64,
    /// Relative standard deviation from slip.
    pub slip_sd: f64,
}

/// The four defect frequencies, in turns of the shaft.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct DefectOrders {
    /// Cage.
    pub ftf: f64,
    /// Outer ring.
    pub bpfo: f64,
    /// Inner ring.
    pub bpfi: f64,
    /// Ball spin.
    pub bsf: f64,
}

impl Bearing {
    /// Defect frequencies as multiples of the shaft's speed.
    pub fn defect_orders(&self) -> DefectOrders {
        let balls = f64::from(self.balls);
        let gamma = self.ball_mm / self.pitch_mm * self.angle_deg.to_radians().cos();
        let ftf = (1.0 - gamma) / 2.0;
        DefectOrders {
            ftf,
            bpfo: balls * ftf,
            bpfi: balls * (1.0 + gamma) / 2.0,
            bsf: self.pitch_mm / (2.0 * self.ball_mm) * (1.0 - gamma * gamma),
        }
    }

    /// The source, riding on `shaft`. The description is taken as valid: the site
    /// file reader checks it.
    pub fn expand(&self, shaft: Turning) -> Source {
        let orders = self.defect_orders();
        let mut lines = Vec::new();
        let mut add = |label: String, turns: f64, weight: f64| {
            lines.push(self.defect_line(shaft.latent, label, shaft.ratio * turns, weight));
        };
        for k in 1..=MULTIPLES {
            let multiple = f64::from(k);
            let falling = multiple.powf(-0.5);
            add(format!("{k}bpfo"), multiple * orders.bpfo, falling);
            let reach: i32 = if k <= 3 { 2 } else { 0 };
            for j in -reach..=reach {
                add(
                    format!("{k}bpfi{}", signed(j, "x")),
                    multiple * orders.bpfi + f64::from(j),
                    0.8 * falling * 0.5_f64.powi(j.abs()),
                );
            }
        }
        add("1bsf".to_owned(), orders.bsf, 0.25);
        add("2bsf".to_owned(), 2.0 * orders.bsf, 0.5);
        add("4bsf".to_owned(), 4.0 * orders.bsf, 0.35);
        for j in [-1, 1] {
            add(
                format!("2bsf{}", signed(j, "ftf")),
                2.0 * orders.bsf + f64::from(j) * orders.ftf,
                0.25,
            );
        }
        add("1ftf".to_owned(), orders.ftf, 0.3);
        lines.retain(|l| l.terms.iter().any(|&(_, a)| a > 0.0));
        source(&self.name, Kind::Bearing, lines)
    }

    fn defect_line(&self, shaft: LatentId, label: String, turns: f64, weight: f64) -> Line {
        Line {
            extra_rel_sd: self.slip_sd,
            ..line(label, &[(shaft, turns)], weight)
        }
    }
}
