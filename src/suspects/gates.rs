//! Causes that make several by-products at once, or none: a saturated input makes
//! all harmonics of a strong tone, a buffer's seam the whole comb.
//!
//! A gate is such a cause, open or shut. Given that it is open each of its products
//! shows with some chance, so those that are missing count against it; and a tone's
//! own product may not vouch for the gate that would explain it:
//!
//! ```text
//! odds(open | all but i) = p/(1 − p) · Π_k (1 − s_k) · Π_{j≠i} (1 + x_j),
//! x_j = Σ_k s_k/(1 − s_k) · density_k(j) / others_j
//! ```
//!
//! The recorder's artefacts take part in the sweeps like sources without latents;
//! distortion looks at the tones once the sources are settled.

use super::byproducts::Byproduct;

/// A cause that is there as a whole or not at all.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Gate {
    /// Probability that it is open, before looking; in (0, 1).
    pub prior: f64,
    /// Log of the chance that none of its products shows although it is open, ≤ 0.
    pub ln_hidden: f64,
    /// Sources compete with it. Not where every line of a family is a product of its
    /// other lines too: each tone on its own would take that for an alternative, as
    /// if the gate could be opened anew for every tone.
    pub rival: bool,
    /// Indices of its by-products, each of another tone or of the same.
    pub products: std::ops::Range<usize>,
}

/// What the gates tell the tones.
#[derive(Debug, Clone, Default)]
pub(super) struct Told {
    /// Per by-product: probability that its gate is open as far as the *other*
    /// tones say.
    pub open: Vec<f64>,
    /// Per tone: density of all by-products.
    pub density: Vec<f64>,
    /// Per tone: of those that sources compete with.
    pub rival_density: Vec<f64>,
}

/// Lets every gate, or the `rivals` of sources only, look at the tones. `others` is
/// everything but by-products.
pub(super) fn look(
    gates: &[Gate],
    products: &[Byproduct],
    others: &[f64],
    before: &Told,
    rivals: bool,
) -> Told {
    let mut told = Told {
        open: vec![0.0; products.len()],
        density: before.density.clone(),
        rival_density: vec![0.0; others.len()],
    };
    told.density.resize(others.len(), 0.0);
    // (tone, what this gate would put there, what it told it so far)
    let mut own: Vec<(usize, f64, f64)> = Vec::new();
    for gate in gates.iter().filter(|g| g.rival || !rivals) {
        own.clear();
        for k in gate.products.clone() {
            let Some(b) = products.get(k) else { continue };
            let said = before.open.get(k).copied().unwrap_or(0.0) * b.density;
            match own.iter_mut().find(|o| o.0 == b.tone) {
                Some(o) => {
                    o.1 += b.density;
                    o.2 += said;
                }
                None => own.push((b.tone, b.density, said)),
            }
        }
        let x = |&(tone, density, said): &(usize, f64, f64), told: &Told| {
            let get = |v: &[f64]| v.get(tone).copied().unwrap_or(0.0);
            density / (get(others) + (get(&told.density) - said).max(0.0)).max(1e-300)
        };
        let gains: Vec<f64> = own.iter().map(|o| x(o, &told).ln_1p()).collect();
        let all: f64 = gate.ln_hidden + gains.iter().sum::<f64>();
        let ln_prior = gate.prior.ln() - (-gate.prior).ln_1p();
        for (o, gain) in own.iter().zip(&gains) {
            let open = logistic(ln_prior + all - gain);
            let message = open * o.1;
            if let Some(d) = told.density.get_mut(o.0) {
                *d = (*d - o.2).max(0.0) + message;
            }
            for k in gate.products.clone() {
                if products.get(k).map(|b| b.tone) == Some(o.0)
                    && let Some(slot) = told.open.get_mut(k)
                {
                    *slot = open;
                }
            }
        }
    }
    // Sums of differences drift: add up anew.
    told.density.fill(0.0);
    for gate in gates {
        for k in gate.products.clone() {
            let (Some(b), Some(open)) = (products.get(k), told.open.get(k)) else {
                continue;
            };
            let add = |v: &mut Vec<f64>| {
                if let Some(d) = v.get_mut(b.tone) {
                    *d += b.density * open;
                }
            };
            add(&mut told.density);
            if gate.rival {
                add(&mut told.rival_density);
            }
        }
    }
    told
}

fn logistic(x: f64) -> f64 {
    if x > 0.0 {
        1.0 / (1.0 + (-x).exp())
    } else {
        x.exp() / (1.0 + x.exp())
    }
}

#[cfg(test)]
mod tests {
    use super::super::byproducts::Maker;
    use super::*;

    fn product(tone: usize) -> Byproduct {
        Byproduct {
            tone,
            maker: Maker::Recorder,
            label: String::new(),
            density: 1.0,
        }
    }

    /// One coincidence opens no gate; several do, and a tone does not count for
    /// itself.
    #[test]
    fn products_vouch_for_each_other_and_not_for_themselves() {
        let products: Vec<Byproduct> = (0..3).map(product).collect();
        let others = [1e-4; 3];
        let look_at = |products: &[Byproduct]| {
            let gate = Gate {
                prior: 0.01,
                ln_hidden: -1.0,
                rival: false,
                products: 0..products.len(),
            };
            look(&[gate], products, &others, &Told::default(), false)
        };
        let one = look_at(&products[..1]);
        let expected = logistic(0.01f64.ln() - 0.99f64.ln() - 1.0);
        assert!((one.open[0] - expected).abs() < 1e-12, "{one:?}");
        let three = look_at(&products);
        assert!(three.open.iter().all(|o| *o > 0.999), "{three:?}");
    }

    /// Tones that something else explains open nothing.
    #[test]
    fn explained_tones_open_no_gate() {
        let products: Vec<Byproduct> = (0..6).map(product).collect();
        let gate = Gate {
            prior: 0.02,
            ln_hidden: -3.0,
            rival: true,
            products: 0..6,
        };
        let told = look(&[gate], &products, &[50.0; 6], &Told::default(), false);
        assert!(told.open.iter().all(|o| *o < 0.01), "{told:?}");
    }
}
