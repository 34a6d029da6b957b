//! What is said of a site file that is wrong.

use super::PLANT;
use foldtrace::sources::{Problem, Site, SiteError};
use rand::{RngExt, SeedableRng};

/// (what is wrong, where, in which key, and a word of the message)
#[rustfmt::skip] // one mistake a row
const WRONG: &[(&str, usize, &str, &str)] = &[
    ("[[source]]\nkind = \"mains\"\nhz = 50\n", 1, "name", "missing"),
    ("\n\n[[source]]\nname = \"a\"\nhz = 50\n", 3, "kind", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"mians\"\nhz = 50\n", 3, "kind", "did you mean `mains`?"),
    ("[[source]]\nname = \"a\"\nkind = \"laser\"\nhz = 50\n", 3, "kind", "mains, shaft, clock, drive, motor, gear, bearing, tone"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\n", 1, "hz", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = -50\n", 4, "hz", "must be positive, got -50"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 0\n", 4, "hz", "must be positive"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = nan\n", 4, "hz", "finite"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = -inf\n", 4, "hz", "finite"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 1e300\n", 4, "hz", "from"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = \"50\"\n", 4, "hz", "must be a number"),
    ("[[source]]\nname = 5\nkind = \"mains\"\nhz = 50\n", 2, "name", "text"),
    ("[[source]]\nname = \" \"\nkind = \"mains\"\nhz = 50\n", 2, "name", "printable"),
    ("[[source]]\nname = \"a\\u001b[31m\"\nkind = \"mains\"\nhz = 50\n", 2, "name", "printable"),
    ("[[source]]\nname = \"unlisted\"\nkind = \"mains\"\nhz = 50\n", 2, "name", "another name"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norder = 4\n", 5, "order", "did you mean `orders`?"),
    ("[[source]]\nname = \"a\"\nkind = \"tone\"\nhz = 50\norders = 4\n", 5, "orders", "not known"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = 4.5\n", 5, "orders", "whole number"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = 0\n", 5, "orders", "positive"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\norders = 99999999999\n", 5, "orders", "10000"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = \"1 furlong\"\n", 5, "tolerance", "unit"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = 1\n", 5, "tolerance", "text with a unit"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = \"0 %\"\n", 5, "tolerance", "positive"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\ntolerance = \"60 Hz\"\n", 5, "tolerance", "below the frequency"),
    ("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = 50\n[[source]]\nname = \"a\"\nkind = \"tone\"\nhz = 5\n", 6, "name", "line 1"),
    ("[[source]]\nname = \"a\"\nkind = \"shaft\"\n", 1, "rpm", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"shaft\"\nhz = 25\nrpm = 1500\n", 5, "rpm", "`hz`"),
    ("[[source]]\nname = \"a\"\nkind = \"clock\"\nhz = 25\nsidebands = 3\n", 5, "sideband_hz", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"clock\"\nhz = 25\norders = 5000\nsideband_hz = 1\nsidebands = 2\n", 7, "sidebands", "at most 0"),
    ("[[source]]\nname = \"a\"\nkind = \"drive\"\ncarrier_hz = 4000\n", 1, "output_hz", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"drive\"\ncarrier_hz = 4000\noutput_hz = 42\norders = 9000\n", 6, "orders", "from 1 to 1538"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 3\nrpm = 1450\n", 5, "poles", "even"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\n", 1, "rpm", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\npoles = 4\nrpm = 1450\n", 1, "mains_hz", "missing"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 2\nrpm = 1450\n", 6, "rpm", "synchronous speed 3000 rpm"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\nrpm = 1450\nslip = \"2..5 %\"\n", 7, "slip", "`rpm`"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nmains_hz = 50\npoles = 4\nslip = [2, 5]\n", 6, "slip", "slip"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"b\"\npoles = 4\nrpm = 1450\n", 4, "fed_by", "no source"),
    ("[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"pmup\"\npoles = 4\nrpm = 1450\n[[source]]\nname = \"pump\"\nkind = \"tone\"\nhz = 5\n", 4, "fed_by", "did you mean `pump`?"),
    ("[[source]]\nname = \"b\"\nkind = \"tone\"\nhz = 5\n[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"b\"\npoles = 4\nrpm = 1450\n", 8, "fed_by", "of kind tone"),
    ("[[source]]\nname = \"b\"\nkind = \"drive\"\ncarrier_hz = 4000\noutput_hz = 42\n[[source]]\nname = \"a\"\nkind = \"motor\"\nfed_by = \"b\"\npoles = 12\nrpm = 1450\n", 11, "rpm", "synchronous speed 420 rpm"),
    ("[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\n", 1, "on", "missing"),
    ("[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"g\"\n", 5, "on", "ride on itself"),
    ("[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"h\"\n[[source]]\nname = \"h\"\nkind = \"gear\"\nteeth = 20\non = \"g\"\n", 5, "on", "ride on itself"),
    ("[[source]]\nname = \"m\"\nkind = \"mains\"\nhz = 50\n[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"m\"\n", 9, "on", "of kind mains"),
    ("[[source]]\nname = \"g\"\nkind = \"gear\"\nteeth = 20\non = \"m\"\nratio = -1\n", 6, "ratio", "positive"),
    ("[[source]]\nname = \"b\"\nkind = \"bearing\"\non = \"s\"\nballs = 9\nball_mm = 40\npitch_mm = 39\n", 6, "ball_mm", "fit"),
    ("[[source]]\nname = \"b\"\nkind = \"bearing\"\non = \"s\"\nballs = 9\nball_mm = 8\npitch_mm = 39\nangle_deg = 90\n", 8, "angle_deg", "90"),
    ("[recorder]\nclock_ppm = 0\n", 2, "clock_ppm", "positive"),
    ("[recorder]\nclock = 100\n", 2, "clock", "clock_ppm"),
    ("[recorder]\nfull_scale = \"50\"\n", 2, "full_scale", "unit"),
    ("[recorder]\nstages = []\n", 2, "stages", "rates"),
    ("[recorder]\nstages = [48000, -8000]\n", 2, "stages", "positive"),
    ("[recorder]\naperture_s = -1\n", 2, "aperture_s", "from 0"),
    ("[recorder]\nantialias = { family = \"buterworth\", order = 4, corner_hz = 1 }\n", 2, "family", "did you mean `butterworth`?"),
    ("[recorder]\nantialias = { family = \"elliptic\", order = 4, corner_hz = 1, ripple_db = 1 }\n", 2, "stop_db", "missing"),
    ("[recorder]\nantialias = { family = \"bessel\", order = 40, corner_hz = 1 }\n", 2, "order", "from 1 to 20"),
    ("[recorder]\n[recorder.antialias]\nfamily = \"bessel\"\norder = 4\ncorner_hz = 1\nripple_db = 1\n", 6, "ripple_db", "not known"),
    ("[[recorder]]\nclock_ppm = 1\n", 1, "recorder", "one table"),
    ("[source]\nname = \"a\"\n", 1, "source", "double brackets"),
    ("[[sources]]\nname = \"a\"\n", 1, "sources", "did you mean `source`?"),
];

#[test]
fn each_mistake_is_told_with_its_line_and_key() {
    for &(text, line, key, word) in WRONG {
        let error = Site::from_toml(text).expect_err(text);
        let said = error.to_string();
        assert_eq!(error.line(), Some(line), "{text}\n{said}");
        assert_eq!(error.key_name(), Some(key), "{text}\n{said}");
        assert!(said.contains(word), "{text}\n{said}");
        assert!(
            said.starts_with(&format!("line {line}: key `{key}`: ")),
            "{said}"
        );
        assert!(!said.chars().any(char::is_control), "{said:?}");
    }
}

#[test]
fn what_is_not_toml_is_told_with_its_line() {
    for (text, line) in [
        ("[[source]]\nname = \"a\nkind = 1\n", 2),
        ("[[source]]\nname = \"a\"\nname = \"b\"\n", 3),
        ("[[source]]\r\nname = \"a\"\r\n]\r\n", 3),
        ("[recorder]\nclock_ppm = 12_\n", 2),
    ] {
        let error = Site::from_toml(text).expect_err(text);
        assert!(matches!(error, SiteError::Syntax { .. }), "{error}");
        assert_eq!(error.line(), Some(line), "{text}\n{error}");
        assert!(!error.to_string().chars().any(char::is_control), "{error}");
    }
    assert!(matches!(
        Site::from_toml("# nothing\n"),
        Err(SiteError::Empty)
    ));
    let deep = format!("a = {}", "[".repeat(100_000));
    assert!(Site::from_toml(&deep).is_err());
}

#[test]
fn each_mistake_in_a_list_is_told_with_its_line_and_column() {
    for (text, line, key) in [
        ("name,hz\na,fifty\n", 2, "hz"),
        ("name,hz\n\n# note\na,-50\n", 4, "hz"),
        ("name,hz\r\na,1\r\nb,nan\r\n", 3, "hz"),
        ("name,hz\n,50\n", 2, "name"),
        ("name,hz\na,\n", 2, "hz"),
        ("name,hz\na\n", 2, "hz"),
        ("name,hz,tolerance\na,50,1\n", 2, "tolerance"),
        ("name,hz,tolerance\na,50,-1 %\n", 2, "tolerance"),
        ("name,hz,orders\na,50,0\n", 2, "orders"),
        ("name,hz,orders\na,50,1.5\n", 2, "orders"),
        ("name,hz,orders\na,50,20000\n", 2, "orders"),
        ("name,hz\na,50\nb,60\na,70\n", 4, "name"),
        ("name,hz,colour\na,50,red\n", 1, "colour"),
        ("name,hz,hz\na,50,50\n", 1, "hz"),
        ("name;hz\na;50,5\n", 2, "hz"),
    ] {
        let error = Site::from_list(text).expect_err(text);
        assert_eq!(error.line(), Some(line), "{text}\n{error}");
        assert_eq!(error.key_name(), Some(key), "{text}\n{error}");
    }
    let error = Site::from_list("name,hz\na,50,1 %\n").unwrap_err();
    assert_eq!(error.line(), Some(2), "{error}");
    assert!(matches!(
        Site::from_list("name,hz\n"),
        Err(SiteError::Empty)
    ));
}

/// Every prefix of a good file, and the file with any one byte changed, gives a
/// site or one line of error.
#[test]
fn damaged_files_never_panic() {
    let list = "name;hz;tolerance;orders\n\"a;b\";50;1 %;3\nc;60;;\n";
    let mut rng = rand::rngs::StdRng::seed_from_u64(29);
    let mut refused = 0;
    let mut check = |text: &str| {
        for result in [Site::from_toml(text), Site::from_list(text)] {
            if let Err(error) = result {
                refused += 1;
                let said = error.to_string();
                assert!(
                    !said.is_empty() && !said.chars().any(char::is_control),
                    "{said:?}"
                );
            }
        }
    };
    for text in [PLANT, list] {
        for end in (0..=text.len()).filter(|&end| text.is_char_boundary(end)) {
            check(&text[..end]);
        }
        for _ in 0..2000 {
            let mut bytes = text.as_bytes().to_vec();
            let at = rng.random_range(0..bytes.len());
            bytes[at] = rng.random_range(0..128);
            check(&String::from_utf8(bytes).unwrap());
        }
    }
    assert!(refused > 1000);
}

#[test]
fn problems_say_what_would_help() {
    let error =
        Site::from_toml("[[source]]\nname = \"a\"\nkind = \"mains\"\nhz = -50\n").unwrap_err();
    assert_eq!(
        error.to_string(),
        "line 4: key `hz`: must be positive, got -50"
    );
    let SiteError::Key { problem, .. } = error else {
        panic!("not a key");
    };
    assert_eq!(problem, Problem::NotPositive { got: -50.0 });
}
