//! What one stage of a [`Chain`](super::Chain) does to a frequency, forwards and
//! backwards, and the count of turns along the way.

use super::{Edge, is_odd, nearest_multiple, segment};

/// One rate of a chain.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Stage {
    pub(super) rate_hz: f64,
    pub(super) half_hz: f64,
    /// Turns that the later stages make strictly inside one sweep of this
    /// stage's band, `(0, rate/2)`.
    pub(super) inner_turns: f64,
}

impl Stage {
    /// Segment index and folded frequency of `x ≥ 0`.
    pub(super) fn fold(&self, x: f64, edge: Edge) -> (f64, f64) {
        let (k, r) = nearest_multiple(x, self.rate_hz);
        (segment(k, r, self.half_hz, edge), r.abs())
    }

    /// Turns of this and the later stages up to a point in segment `index`, the
    /// later ones' share of that segment excepted.
    fn turns(&self, index: f64) -> f64 {
        let sweeps = index * (self.inner_turns + 1.0);
        if is_odd(index) {
            sweeps + self.inner_turns
        } else {
            sweeps
        }
    }
}

/// Where `x` ends after all `stages`, and how often the map has turned up to it.
///
/// With `P(x)` the turns in `(0, x]` and `Q(x)` those in `(0, x)`, a stage whose
/// later stages turn `T` times in each of its sweeps has, in segment `j`,
/// `P(x) = j(T+1) + P'(y)` going up and `j(T+1) + T − Q'(y)` coming down, where
/// `y` is the folded `x` and `P', Q'` belong to the later stages; and `Q` alike
/// with `P'` and `Q'` exchanged. That is one pass with a sign.
pub(super) fn walk(stages: &[Stage], x: f64, edge: Edge) -> (f64, f64) {
    let (mut x, mut edge, mut turns, mut sign) = (x, edge, 0.0, 1.0);
    for stage in stages {
        let (index, folded) = stage.fold(x, edge);
        turns += sign * stage.turns(index);
        if is_odd(index) {
            sign = -sign;
            edge = edge.flipped();
        }
        x = folded;
    }
    (x, turns)
}

/// Turns of `stages` strictly inside `(0, top_hz)`.
///
/// A top meant to be a whole multiple of a later half rate may miss it by the
/// rounding of the two rates (47 952.05 and a sixth of it); counted to the bit,
/// that would be a turn at the very end of each sweep. So a hair below the top is
/// where the count is taken.
pub(super) fn inner_turns(stages: &[Stage], top_hz: f64) -> f64 {
    walk(stages, top_hz * (1.0 - 1e-12), Edge::Above).1
}

/// A component on its way through the stages.
#[derive(Debug, Clone, Copy)]
pub(super) struct Part {
    pub(super) hz: f64,
    pub(super) crossed: f64,
    pub(super) edge: Edge,
    pub(super) image: bool,
}

impl Part {
    pub(super) fn fold(&mut self, stage: &Stage) {
        let (index, folded) = stage.fold(self.hz, self.edge);
        self.advance(index, folded);
    }

    /// To `hz` past `crossed` reflections.
    fn advance(&mut self, crossed: f64, hz: f64) {
        self.hz = hz;
        self.crossed += crossed;
        if is_odd(crossed) {
            self.edge = self.edge.flipped();
        }
    }

    /// Images about the multiples of `stage`'s rate up to `top_hz`.
    pub(super) fn images(self, stage: &Stage, top_hz: f64) -> impl Iterator<Item = Part> {
        let Stage {
            rate_hz, half_hz, ..
        } = *stage;
        let position = move |order: f64| {
            if !is_odd(order) {
                (0.5 * order).mul_add(rate_hz, self.hz)
            } else {
                (0.5 * (order + 1.0)).mul_add(rate_hz, -self.hz)
            }
        };
        (1u32..)
            .map(f64::from)
            .map(move |order| (order, position(order)))
            .take_while(move |&(_, hz)| hz <= top_hz)
            .filter(move |&(order, _)| {
                // At the ends of the band images meet in pairs.
                let odd = is_odd(order);
                if odd {
                    self.hz < half_hz
                } else {
                    self.hz > 0.0
                }
            })
            .map(move |(order, hz)| {
                let mut image = self;
                image.advance(order, hz);
                image.image = true;
                image
            })
    }
}

/// A frequency on its way back from the file to the analog world.
#[derive(Debug, Clone, Copy)]
pub(super) struct Candidate {
    pub(super) hz: f64,
    /// Turns of the stages passed so far up to `hz`, a turn at `hz` included.
    pub(super) above: f64,
    /// The same without a turn at `hz`.
    pub(super) below: f64,
    /// Segment indices and image orders, added up.
    pub(super) crossed: f64,
    pub(super) image: bool,
}

impl Candidate {
    /// Every frequency up to `limit_hz` that `stage` folds to this one.
    pub(super) fn unfolded(self, stage: &Stage, limit_hz: f64) -> impl Iterator<Item = Candidate> {
        let stage = *stage;
        // A limit that is a half rate itself may be missed by a rounding.
        let slack = 1.0 + 4.0 * f64::EPSILON;
        let at_top = self.hz >= stage.half_hz;
        let step = if at_top || self.hz == 0.0 { 2 } else { 1 };
        (0u32..)
            .step_by(step)
            .map(f64::from)
            .map(move |index| {
                let rises = !is_odd(index);
                let hz = if rises {
                    (0.5 * index).mul_add(stage.rate_hz, self.hz)
                } else {
                    (0.5 * (index + 1.0)).mul_add(stage.rate_hz, -self.hz)
                };
                let (over, under) = if at_top {
                    (index + 1.0, index)
                } else if self.hz == 0.0 {
                    (index, (index - 1.0).max(0.0))
                } else {
                    (index, index)
                };
                Candidate {
                    hz,
                    above: self.turns(&stage, over, Edge::Above),
                    below: self.turns(&stage, under, Edge::Below),
                    crossed: self.crossed + over,
                    image: self.image,
                }
            })
            .take_while(move |c| c.hz <= limit_hz * slack)
            .map(move |mut c| {
                c.hz = c.hz.min(limit_hz);
                c
            })
    }

    /// Turns up to this frequency in segment `index` of `stage`: the formulas of
    /// [`walk`], backwards.
    fn turns(self, stage: &Stage, index: f64, edge: Edge) -> f64 {
        let rises = !is_odd(index);
        let later = match (edge, rises) {
            (Edge::Above, true) => self.above,
            (Edge::Above, false) => -self.below,
            (Edge::Below, true) => self.below,
            (Edge::Below, false) => -self.above,
        };
        stage.turns(index) + later
    }

    /// Where `before` (the stage ahead of an interpolating one) had its tone to
    /// leave one here: the same place inside its band, the imaged one above it.
    pub(super) fn undo_image(&mut self, before: &Stage) {
        if self.hz > before.half_hz {
            let (order, folded) = before.fold(self.hz, Edge::Below);
            self.hz = folded;
            self.crossed += order;
            self.image = true;
        }
    }
}
