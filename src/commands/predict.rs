//! `predict`: from a site file to what a recorder would show.

use super::output::{Stop, is_stdout, spare, to_file, to_stdout, usage};
use super::site::load_site;
use super::values::positive;
use clap::Args;
use foldtrace::plan::rates::usual;
use foldtrace::predict::{
    chain_at, predict, rank,
    synthesis::{Settings, Synthesis},
};
use foldtrace::report::prediction;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
For choosing a sample rate before a measurement: lists where each line of the named sources will be seen, \
how far it may stray, in which zone and whether inverted, how much the front end weakens it, and which \
other source's line it may fall on; then ranks sample rates by how well they keep the sources apart (and \
a band clear of folded lines, with --keep-clear). With --wav it also makes a recording to practise on: \
every line at the true sample instants, with noise, clock error and quantising.

Exit: 0 done, 1 the recording could not be written, 2 wrong usage or site file.

Example:
  foldtrace predict --site sample-data/orrowmere.toml --rate 8000 \\
      --keep-clear 20-60 --rates 8000,11025,16000";

/// Options of `predict`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// What is known of the place: a site file (TOML) or a list (CSV); without it, the built-in list
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
    /// Sample rate of the file
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub rate: f64,
    /// A band that folded lines should keep out of, such as 20-60
    #[arg(long, value_name = "LOW-HIGH", value_parser = band)]
    pub keep_clear: Option<(f64, f64)>,
    /// Sample rates to rank, separated by commas; without it, the usual ones
    #[arg(long, value_name = "HZ", value_delimiter = ',', allow_negative_numbers = true, value_parser = positive)]
    pub rates: Vec<f64>,
    /// Lines closer than this fall on each other
    #[arg(long, value_name = "HZ", default_value = "0.5", allow_negative_numbers = true, value_parser = positive)]
    pub resolution: f64,
    /// Write everything as JSON; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub json: Option<PathBuf>,
    /// Make a recording of it
    #[arg(long, value_name = "OUT.wav")]
    pub wav: Option<PathBuf>,
    /// Length of the recording, s
    #[arg(long, value_name = "S", default_value = "60", requires = "wav", allow_negative_numbers = true, value_parser = positive)]
    pub seconds: f64,
    /// Relative error of the recorder's clock, parts per million
    #[arg(long, value_name = "PPM", default_value = "0", requires = "wav", allow_negative_numbers = true, value_parser = clock_error)]
    pub clock_error: f64,
    /// Level of all noise together, dBFS
    #[arg(long, value_name = "DBFS", default_value = "-60", requires = "wav", allow_negative_numbers = true, value_parser = level)]
    pub noise: f64,
    /// Bits per sample
    #[arg(long, value_name = "16|24", default_value = "16", requires = "wav", value_parser = bits)]
    pub bits: u32,
    /// Draw every source's frequency within its tolerance instead of taking it as listed
    #[arg(long, requires = "wav")]
    pub vary: bool,
    /// Makes phases, noise and --vary repeatable
    #[arg(long, value_name = "N", default_value = "1", requires = "wav")]
    pub seed: u64,
}

/// `20-60`, Hz.
fn band(text: &str) -> Result<(f64, f64), String> {
    let wrong = || "give a band in Hz as low-high, such as 20-60".to_owned();
    let (low, high) = text.split_once('-').ok_or_else(wrong)?;
    let number = |t: &str| t.trim().parse::<f64>().map_err(|_| wrong());
    let (low, high) = (number(low)?, number(high)?);
    if low.is_finite() && high.is_finite() && 0.0 <= low && low < high {
        Ok((low, high))
    } else {
        Err(wrong())
    }
}

fn within(text: &str, low: f64, high: f64, unit: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(v) if (low..=high).contains(&v) => Ok(v),
        _ => Err(format!("give a number from {low} to {high} {unit}")),
    }
}

fn clock_error(text: &str) -> Result<f64, String> {
    within(text, -100_000.0, 100_000.0, "ppm")
}

fn level(text: &str) -> Result<f64, String> {
    within(text, -300.0, 0.0, "dBFS")
}

fn bits(text: &str) -> Result<u32, String> {
    match text {
        "16" => Ok(16),
        "24" => Ok(24),
        _ => Err("give 16 or 24".into()),
    }
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let (json, wav) = (arguments.json.as_deref(), arguments.wav.as_deref());
    if is_stdout(wav) {
        return Err(usage(
            "--wav needs a file name: a recording does not go to stdout",
        ));
    }
    let exports: Vec<&Path> = [json, wav].into_iter().flatten().collect();
    spare(arguments.site.iter().map(PathBuf::as_path), &exports)?;
    let (site, site_name) = load_site(arguments.site.as_deref())?;
    let chain = chain_at(&site, arguments.rate).map_err(usage)?;
    let half = arguments.rate / 2.0;
    if let Some((low, _)) = arguments.keep_clear.filter(|b| b.0 >= half) {
        return Err(usage(format!(
            "--keep-clear begins at {low} Hz, but nothing is seen above half of --rate, {half} Hz"
        )));
    }
    // The recording first: what it refuses is known before anything is printed.
    let recording = match wav {
        None => None,
        Some(path) => {
            let settings = Settings {
                seconds: arguments.seconds,
                clock_error_ppm: arguments.clock_error,
                noise_dbfs: arguments.noise,
                bits: arguments.bits,
                seed: arguments.seed,
                vary: arguments.vary,
                ..Settings::default()
            };
            Some((
                path,
                Synthesis::new(&site, &chain, &settings).map_err(usage)?,
            ))
        }
    };
    let mut rates = if arguments.rates.is_empty() {
        usual(arguments.rate)
    } else {
        arguments.rates.clone()
    };
    rates.push(arguments.rate);
    rates.sort_by(f64::total_cmp);
    rates.dedup();
    let foreseen = predict(&site, &chain, arguments.keep_clear, arguments.resolution);
    let ratings = rank(&site, &rates, arguments.keep_clear, arguments.resolution);
    let front = &site.recorder.front_end;
    let described = front.antialias.is_some() || front.aperture_s.is_some();
    if !is_stdout(json) {
        to_stdout(|out| {
            prediction::write(
                &foreseen,
                &site_name,
                arguments.keep_clear,
                &ratings,
                described,
                out,
            )
        })?;
    }
    let all = |out: &mut dyn Write| prediction::write_json(&foreseen, &ratings, out);
    match json {
        Some(_) if is_stdout(json) => to_stdout(all)?,
        Some(path) => to_file(path, all)?,
        None => {}
    }
    if let Some((path, recording)) = recording {
        to_file(path, |out| recording.write(out))?;
    }
    Ok(ExitCode::SUCCESS)
}
