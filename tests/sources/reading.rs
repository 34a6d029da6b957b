//! Reading good files of either form.

use super::{PLANT, hz, near, site, source, u95};
use foldtrace::frontend::Family;
use foldtrace::sources::{Kind, MAX_LINES_PER_SOURCE, Site, SiteError, Steadiness};
use std::io::Write;

#[test]
fn a_whole_site_file_parses() {
    let site = site(PLANT);
    assert_eq!(site.recorder.clock_ppm, Some(100.0));
    assert_eq!(site.recorder.stages_hz, [48000.0, 8000.0]);
    assert_eq!(site.recorder.full_scale, Some((50.0, "m/s^2".to_owned())));
    assert_eq!(site.recorder.front_end.aperture_s, Some(0.0));
    assert_eq!(site.recorder.front_end.bandwidth_hz, Some(400_000.0));
    let filter = site.recorder.front_end.antialias.unwrap();
    assert_eq!(
        (filter.family, filter.order, filter.corner_hz),
        (Family::Butterworth, 4, 2267.6)
    );
    let names: Vec<_> = site
        .catalogue
        .sources
        .iter()
        .map(|s| (s.name.as_str(), s.kind))
        .collect();
    assert_eq!(
        names,
        [
            ("supply mains", Kind::Mains),
            ("idler gear", Kind::Gear),
            ("pump motor", Kind::Motor),
            ("pump drive", Kind::Drive),
            ("fan shaft", Kind::Shaft),
            ("fan bearing", Kind::Bearing),
            ("gauge converter", Kind::Clock),
            ("whistle", Kind::Tone),
        ]
    );
}

#[test]
fn a_site_file_of_a_recorder_only_keeps_the_builtin_sources() {
    let site = site("[recorder]\nclock_ppm = 20\n");
    assert_eq!(site.catalogue, Site::builtin().catalogue);
    assert_eq!(site.recorder.clock_ppm, Some(20.0));
}

#[test]
fn the_most_lines_a_source_may_have_are_taken() {
    let text = |orders| {
        format!("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = {orders}\n")
    };
    let most = site(&text(MAX_LINES_PER_SOURCE));
    assert_eq!(source(&most, "a").lines.len(), 10_000);
    assert!(Site::from_toml(&text(MAX_LINES_PER_SOURCE + 1)).is_err());
    let many: String = (0..21)
        .map(|i| text(MAX_LINES_PER_SOURCE).replace("\"a\"", &format!("\"a{i}\"")))
        .collect();
    let error = Site::from_toml(&many).unwrap_err();
    assert_eq!(
        (error.line(), error.key_name()),
        (Some(101), Some("source"))
    );
}

#[test]
fn plain_lists_with_each_separator() {
    for separator in [",", ";", "\t"] {
        let text = [
            "name,hz,tolerance,orders",
            "# what was found on the bench",
            "",
            "gauge oscillator,62500,3 %,5",
            "whistle,3150,,",
            "\"bell, small\",1200.5,2 Hz,1",
        ]
        .join("\n");
        // The quoted comma stays a comma.
        let text = text
            .replace(',', separator)
            .replace(&format!("bell{separator}"), "bell,");
        let site = Site::from_list(&text).unwrap_or_else(|error| panic!("{error}\n{text}"));
        let kinds: Vec<_> = site
            .catalogue
            .sources
            .iter()
            .map(|s| (s.kind, s.lines.len()))
            .collect();
        assert_eq!(kinds, [(Kind::Clock, 5), (Kind::Tone, 1), (Kind::Tone, 1)]);
        assert_eq!(site.catalogue.sources[2].name, "bell, small");
        assert!(
            site.catalogue
                .latents
                .iter()
                .all(|l| l.steadiness == Steadiness::Free)
        );
        near(u95(&site, "gauge oscillator", "5x"), 5.0 * 1875.0, 1.0);
        near(u95(&site, "whistle", "1x"), 31.5, 0.01);
        near(u95(&site, "bell, small", "1x"), 2.0, 0.001);
    }
    // Any order of columns, and only the two that are needed.
    let short = Site::from_list("Hz,Name\n50,hum\n").unwrap();
    assert_eq!(hz(&short, "hum", "1x"), 50.0);
}

#[test]
fn files_are_told_apart_by_content_and_name() {
    let folder = tempfile::tempdir().unwrap();
    let load = |name: &str, bytes: &[u8]| {
        let path = folder.path().join(name);
        std::fs::File::create(&path)
            .unwrap()
            .write_all(bytes)
            .unwrap();
        Site::load(&path)
    };
    assert_eq!(load("a.toml", PLANT.as_bytes()).unwrap(), site(PLANT));
    assert_eq!(load("noname", PLANT.as_bytes()).unwrap(), site(PLANT));
    let list = b"\xef\xbb\xbf# bench\nname;hz\nhum;50\n";
    assert_eq!(load("b.txt", list).unwrap().catalogue.sources.len(), 1);
    assert_eq!(load("b.toml", list).unwrap().catalogue.sources.len(), 1);
    let marked = format!("\u{feff}{PLANT}");
    assert_eq!(load("c.toml", marked.as_bytes()).unwrap(), site(PLANT));
    // A list by its name, whatever its heading.
    let error = load("d.csv", b"label,hz\nhum,50\n").unwrap_err();
    assert_eq!(error.key_name(), Some("label"));
    let error = load("e.toml", b"[recorder]\nfull_scale = \"\xff V\"\n").unwrap_err();
    assert!(matches!(error, SiteError::NotUtf8 { line: 2 }), "{error}");
    assert!(matches!(
        Site::load(&folder.path().join("none")),
        Err(SiteError::Read { .. })
    ));
    assert!(matches!(
        Site::load(folder.path()),
        Err(SiteError::Read { .. })
    ));
}
