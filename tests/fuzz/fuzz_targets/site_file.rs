//! Site files: TOML and plain lists.
#![no_main]

use foldtrace::sources::{Site, SiteError};
use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| {
    let Ok(text) = std::str::from_utf8(data) else {
        return;
    };
    check(Site::from_toml(text));
    check(Site::from_list(text));
});

/// One line for what is refused; only finite frequencies in what is not.
fn check(site: Result<Site, SiteError>) {
    match site {
        Err(error) => {
            let text = error.to_string();
            assert!(!text.chars().any(char::is_control), "one line: {text:?}");
        }
        Ok(site) => {
            let catalogue = &site.catalogue;
            for source in &catalogue.sources {
                for line in &source.lines {
                    let hz = catalogue.nominal_hz(line);
                    let sd = catalogue.prior_sd_hz(line);
                    assert!(hz.is_finite() && sd.is_finite() && sd >= 0.0);
                }
            }
        }
    }
}
