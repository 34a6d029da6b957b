//! Test statistics of a band: three views of every cell at full resolution, and
//! smoothed views at coarser ones.
//!
//! All are scaled so that their mean on noise is the mean of |X|².

use crate::spectrum::Band;
use crate::spectrum::floor::{self, Floor};

/// Power per cell at the resolution of the whole recording.
#[derive(Debug)]
pub struct Fine {
    /// |X_k|², the most sensitive for a tone on a cell.
    pub plain: Vec<f32>,
    /// |X_k − X_(k+1)|²/2, for a tone half-way to the next cell: −0.9 dB there,
    /// where `plain` is down 3.9 dB.
    pub between: Vec<f32>,
    /// |2X_k − X_(k−1) − X_(k+1)|²/6, the Hann window: −1.8 dB, but far from a
    /// strong tone or a steep slope of noise its sidelobes are gone.
    pub hann: Vec<f32>,
    /// Floor under `plain` and `between`.
    pub plain_floor: Floor,
    /// Floor under `hann`.
    pub hann_floor: Floor,
}

/// Of Hann-windowed bins, the power correlation with the next and next but one:
/// (2/3)² and (1/6)².
const HANN_CORRELATION: [f64; 2] = [4.0 / 9.0, 1.0 / 36.0];

impl Fine {
    /// Computes all three over `band`.
    pub fn new(band: &Band) -> Fine {
        let first = band.first_bin as i64;
        let n = band.bins.len();
        let at = |i: i64| band.get(first + i).unwrap_or_default();
        let plain: Vec<f32> = band.bins.iter().map(|z| z.norm_sqr()).collect();
        let mut between = Vec::with_capacity(n);
        let mut hann = Vec::with_capacity(n);
        let mut before = at(-1);
        for (i, &here) in band.bins.iter().enumerate() {
            let after = at(i as i64 + 1);
            between.push((here - after).norm_sqr() / 2.0);
            hann.push((here * 2.0 - before - after).norm_sqr() / 6.0);
            before = here;
        }
        let from_zero = band.first_bin == 0;
        let mut plain_floor = floor::estimate(&plain, 1.0, 1.0, from_zero);
        lower(&mut plain_floor, band, 1);
        plain_floor.raise(band.least_noise);
        let worth = 1.0 / (1.0 + 2.0 * HANN_CORRELATION.iter().sum::<f64>());
        let mut hann_floor = floor::estimate(&hann, 1.0, worth, from_zero);
        lower(&mut hann_floor, band, 1);
        hann_floor.raise(band.least_noise);
        Fine {
            plain,
            between,
            hann,
            plain_floor,
            hann_floor,
        }
    }
}

/// A tone that fills much of a band would be its floor: where the floor is clearly
/// more than what is known from afar, that holds.
pub fn lower(floor: &mut Floor, band: &Band, stride: usize) {
    for (i, level) in floor.level.iter_mut().enumerate() {
        let known = band.known_floor(i * stride);
        if *level > 1.5 * known {
            *level = known;
        }
    }
}

/// Power smoothed over `width` cells, one value each half width.
#[derive(Debug)]
pub struct Coarse {
    /// Cells per value.
    pub width: usize,
    /// Cells from one value to the next.
    pub stride: usize,
    /// Mean power.
    pub power: Vec<f32>,
    /// Half the degrees of freedom of each on Gaussian noise.
    pub shape: f64,
    /// Its floor.
    pub floor: Floor,
}

impl Coarse {
    /// Smooths `power` (neighbouring cells correlated as under a Hann window,
    /// each of shape `cell_shape`); `None` when fewer than 128 widths are left,
    /// too few to tell a line from the shape of the floor.
    pub fn new(power: &[f32], cell_shape: f64, width: usize, from_zero: bool) -> Option<Coarse> {
        let stride = width / 2;
        if stride == 0 || power.len() / width < 128 {
            return None;
        }
        let sums: Vec<f64> = power
            .chunks_exact(stride)
            .map(|c| c.iter().map(|&v| f64::from(v)).sum())
            .collect();
        let smoothed: Vec<f32> = sums
            .windows(2)
            .map(|w| ((w[0] + w[1]) / (2 * stride) as f64) as f32)
            .collect();
        let w = width as f64;
        let variance =
            w + 2.0 * (w - 1.0) * HANN_CORRELATION[0] + 2.0 * (w - 2.0) * HANN_CORRELATION[1];
        let shape = cell_shape * w * w / variance;
        // Values overlap by half: two are worth about 1/(1 + 2·¼) of themselves.
        let floor = floor::estimate(&smoothed, shape, 2.0 / 3.0, from_zero);
        Some(Coarse {
            width,
            stride,
            power: smoothed,
            shape,
            floor,
        })
    }

    /// Coarser and coarser views of `power`, each four times as wide as the last, as
    /// far as [`Coarse::new`] goes.
    pub fn ladder(
        power: &[f32],
        cell_shape: f64,
        from_zero: bool,
    ) -> impl Iterator<Item = Coarse> + '_ {
        (1..12).map_while(move |s| Coarse::new(power, cell_shape, 4usize.pow(s), from_zero))
    }

    /// The power itself, of shape `shape`, seen through the same interface.
    pub fn unsmoothed(power: &[f32], shape: f64, from_zero: bool) -> Coarse {
        let worth = 1.0 / (1.0 + 2.0 * HANN_CORRELATION.iter().sum::<f64>());
        Coarse {
            width: 1,
            stride: 1,
            power: power.to_vec(),
            shape,
            floor: floor::estimate(power, shape, worth, from_zero),
        }
    }

    /// Cells covered by value `i`.
    pub fn cells(&self, i: usize) -> std::ops::Range<usize> {
        let start = i * self.stride;
        start..start + self.width
    }

    /// Power above the floor, summed over `cells`.
    pub fn excess(&self, cells: &std::ops::Range<usize>) -> f64 {
        let first = cells.start / self.stride;
        let last = cells.end.div_ceil(self.stride).min(self.power.len());
        (first..last)
            .map(|i| f64::from(self.power[i] - self.floor.level[i]) * self.stride as f64)
            .sum()
    }
}
