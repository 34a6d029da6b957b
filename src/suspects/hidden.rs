//! Families that nobody listed.
//!
//! A recording usually holds whole families that the site file does not know: the
//! supply, a second machine. If each of their tones were weighed alone, listed
//! sources would collect them by chance one by one. So families without a name
//! stand beside the listed ones; what they explain counts as `unlisted`.

use super::prior::{Normal, Prior};
use super::scene::Scene;
use crate::sources::{
    Kind, Latent, LatentId, Line, Site, Source, Steadiness, mains, quantity::Tolerance,
};

/// Anonymous harmonic families looked for beside an analyst's list.
const ANONYMOUS: usize = 2;
/// Beside the built-in list, which names no machine: most families are not on it.
const ANONYMOUS_TO_BUILT_IN: usize = 4;
/// Multiples of each.
const MULTIPLES: u32 = 12;
/// Probability that an anonymous family is there, before looking; of each of two.
pub(super) const ANONYMOUS_PRESENT: f64 = 0.2;
/// That the supply is there although not listed.
pub(super) const SUPPLY_PRESENT: f64 = 0.3;
/// Group of the unlisted supplies of 50 and 60 Hz.
pub(super) const SUPPLY_GROUP: &str = "\u{0}unlisted supply";

/// What stands beside the listed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Standing {
    Listed,
    Supply,
    Anonymous,
}

/// The site with hidden families appended.
#[derive(Debug, Clone)]
pub(super) struct Extended {
    pub site: Site,
    /// Per source.
    pub standing: Vec<Standing>,
    /// Per latent.
    pub priors: Vec<Prior>,
}

/// Appends hidden families; listed latents get the clock's error added.
pub(super) fn extend(scene: &Scene, clock_sd: f64) -> Extended {
    let mut site = scene.site.clone();
    let mut standing = vec![Standing::Listed; site.catalogue.sources.len()];
    let catalogue = &mut site.catalogue;
    if !catalogue.sources.iter().any(|s| s.kind == Kind::Mains) {
        for hz in [50.0, 60.0] {
            let supply = mains::Mains {
                name: format!("supply of {hz} Hz, not listed"),
                hz,
                tolerance: Tolerance::percent(0.8),
                orders: 80,
            };
            let (_, mut source) = supply.expand(&mut catalogue.latents);
            source.exclusive_group = Some(SUPPLY_GROUP.to_owned());
            catalogue.sources.push(source);
            standing.push(Standing::Supply);
        }
    }
    let mut priors: Vec<Prior> = catalogue
        .latents
        .iter()
        .map(|l| {
            Prior::Normal(Normal {
                mean: l.nominal_hz,
                sd: l.sd_hz.hypot(l.nominal_hz * clock_sd).max(1e-12),
            })
        })
        .collect();
    let half = scene.chain.file_rate_hz() / 2.0;
    let low = (4.0 / scene.duration_s).max(half / 400.0).min(0.5 * half);
    // Only built-in sources say where their values come from.
    let built_in = scene
        .site
        .catalogue
        .sources
        .iter()
        .any(|s| !s.citation.is_empty());
    let families = if built_in {
        ANONYMOUS_TO_BUILT_IN
    } else {
        ANONYMOUS
    };
    for n in 0..families {
        let name = format!("family {}, not listed", n + 1);
        catalogue.latents.push(Latent {
            name: name.clone(),
            nominal_hz: 0.3 * half,
            sd_hz: half,
            steadiness: Steadiness::Free,
        });
        let latent = LatentId(catalogue.latents.len() - 1);
        catalogue.sources.push(Source {
            name,
            kind: Kind::Clock,
            lines: (1..=MULTIPLES)
                .map(|k| Line {
                    label: format!("{k}x"),
                    terms: vec![(latent, f64::from(k))],
                    extra_rel_sd: 0.0,
                    weight: f64::from(k).powf(-0.5),
                })
                .collect(),
            citation: String::new(),
            exclusive_group: None,
            presence: ANONYMOUS_PRESENT,
        });
        standing.push(Standing::Anonymous);
        priors.push(Prior::Anywhere { low, high: half });
    }
    Extended {
        site,
        standing,
        priors,
    }
}
