//! Everything, machine readable.

use crate::triage::Triage;
use serde_json::{Value, json};
use std::io::Write;

/// Writes one object with all results under `recordings`.
///
/// # Errors
/// If `out` cannot be written.
pub fn write(results: &[Triage], top: usize, mut out: impl Write) -> std::io::Result<()> {
    let all: Vec<Value> = results.iter().map(|r| recording(r, top)).collect();
    let document = json!({
        "program": env!("CARGO_PKG_NAME"),
        "version": env!("CARGO_PKG_VERSION"),
        "recordings": all,
    });
    serde_json::to_writer_pretty(&mut out, &document)?;
    out.write_all(b"\n")?;
    out.flush()
}

fn recording(result: &Triage, top: usize) -> Value {
    let spec = &result.spec;
    let tones: Vec<Value> = result
        .rows()
        .map(|(tone, finding)| {
            let suspects: Vec<Value> = finding
                .suspects
                .iter()
                .take(top)
                .map(|s| {
                    json!({
                        "suspect": s.cause.name(),
                        "cause": s.cause,
                        "line": s.line,
                        "true_hz": s.true_hz,
                        "true_hz_u95": s.true_hz_u95,
                        "zone": s.zone,
                        "inverted": s.sense.is_inverted(),
                        "probability": s.probability,
                        "coincidence": s.coincidence,
                    })
                })
                .collect();
            let channels: Vec<Value> = tone
                .channels
                .iter()
                .map(|c| {
                    json!({
                        "channel": spec.channels.get(c.channel).map(|ch| &ch.name),
                        "level_dbfs": c.level_dbfs,
                        "snr_db": c.snr_db,
                        "amplitude": amplitude(result, c.level_dbfs),
                    })
                })
                .collect();
            json!({
                "tone": tone.number,
                "channel": result.channel_names(tone),
                "seen_hz": tone.seen_hz,
                "seen_hz_u95": tone.seen_hz_u95,
                "level_dbfs": tone.level_dbfs,
                "snr_db": tone.snr_db,
                "from_s": tone.from_s,
                "to_s": tone.to_s,
                "duty": tone.duty,
                "wander_hz": tone.wander_hz,
                "linewidth_hz": tone.linewidth_hz,
                "track": tone.track,
                "track_step_s": tone.track_step_s,
                "channels": channels,
                "verdict": finding.verdict,
                "folded_probability": finding.folded_probability,
                "unlisted": {
                    "probability": finding.unlisted_direct + finding.unlisted_folded,
                    "in_band": finding.unlisted_direct,
                    "folded": finding.unlisted_folded,
                    "at": finding.unlisted_at,
                },
                "rests_on": finding.grounds,
                "suspects": suspects,
            })
        })
        .collect();
    json!({
        "recording": result.recording,
        "format": spec.format,
        "rate_hz": spec.rate_hz,
        "samples": spec.frames,
        "duration_s": spec.duration_s(),
        "resolution_hz": result.tones.cell_hz,
        "channels": spec.channels.iter().map(|c| json!({"name": c.name, "unit": c.unit})).collect::<Vec<_>>(),
        "full_scale": result.full_scale.as_ref().map(|(value, unit)| json!({"value": value, "unit": unit})),
        "notes": spec.notes,
        "tones_left_out": result.tones.left_out,
        "missing_samples": result.tones.missing,
        "condition": result.tones.condition,
        "analysis": result.tones.plan,
        "tones": tones,
        "sources": sources(result),
        "evidence": result.evidence,
        "clock": {"ppm": result.inference.clock.ppm, "ppm_u95": result.inference.clock.ppm_u95},
        "next_test": result.next,
        "summary": result.summary(),
    })
}

fn sources(result: &Triage) -> Vec<Value> {
    result
        .fits()
        .map(|(name, fit)| {
            json!({
                "source": name,
                "present_probability": fit.present_probability,
                "tones_explained": fit.tones_explained,
                "latents": fit.latents.iter().map(|(latent, hz, u95)| {
                    json!({"name": latent, "hz": hz, "hz_u95": u95})
                }).collect::<Vec<_>>(),
            })
        })
        .collect()
}

/// Amplitude in the recording's unit, where full scale is known.
fn amplitude(result: &Triage, level_dbfs: f64) -> Option<f64> {
    let full_scale = match &result.full_scale {
        Some((value, _)) => *value,
        None if !result.spec.normalised => 1.0,
        None => return None,
    };
    Some(full_scale * 10f64.powf(level_dbfs / 20.0))
}
