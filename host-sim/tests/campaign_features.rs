//! What is off by default: results as Parquet, read back by the library's own reader (the same values as in the CSV,
//! and the provenance), and figures as PNG.

mod support;

use support::Bench;

const CAMPAIGN: &str = r#"version = 1
name = "small"
seed = 5
runs = 9
[scene]
record = { sample_rate_mhz = 50.0, samples = 1024 }
probe = { kind = "contact", centre_frequency_mhz = 5.0, relative_bandwidth_percent = 60.0 }
wall = { material = "carbon steel", velocity_m_s = 5920.0, thickness_mm = 8.0 }
[setup]
record = { sample_rate_mhz = 50.0, bits = 12 }
probe = { kind = "contact", centre_frequency_mhz = 5.0, relative_bandwidth_percent = 60.0, element_diameter_mm = 6.0 }
material = { velocity_m_s = 5920.0, velocity_standard_uncertainty_m_s = 6.0 }
measure = { span = "back-wall-to-back-wall", from_us = 0.5 }
[grid]
"scene.noise.snr_db" = [-20.0, 30.0]
walls = [
  { label = "a, \"b\"", "scene.wall.thickness_mm" = { log_uniform = [4.0, 12.0] } },
  { label = "7", "scene.wall.thickness_mm" = 7.0 },
]
"#;

#[cfg(not(feature = "parquet"))]
#[test]
fn parquet_that_was_left_out_is_an_error_before_the_campaign() {
    let bench = Bench::new();
    bench.write("small.toml", CAMPAIGN);
    let run = bench.run(&["campaign", "small.toml", "-o", "all.csv", "--parquet", "all.parquet"]);
    assert!(run.error().contains("--features parquet"), "{}", run.errors);
    assert!(!bench.path("all.csv").exists());
}

/// A picture of the size that the SVG has, twice as fine.
#[test]
fn figures_are_also_pictures() {
    let bench = Bench::new();
    bench.write("small.toml", CAMPAIGN);
    let run = bench.run(&["campaign", "small.toml", "--figures", "figures"]);
    assert_eq!(run.status, 0, "{}", run.errors);
    for name in ["errors", "rates"] {
        let svg = std::fs::read_to_string(bench.path(&format!("figures/{name}.svg"))).unwrap();
        assert!(svg.contains("SNR in dB"), "{name} has no axis");
        let picture = std::fs::read(bench.path(&format!("figures/{name}.png")));
        if cfg!(feature = "png") {
            let picture = picture.unwrap();
            // PNG specification, third edition: signature, then IHDR with width and height.
            assert_eq!(picture[..8], [0x89, b'P', b'N', b'G', 0x0d, 0x0a, 0x1a, 0x0a]);
            let width = u32::from_be_bytes(picture[16..20].try_into().unwrap());
            let of_svg: f64 = svg
                .split("width=\"")
                .nth(1)
                .unwrap()
                .split('"')
                .next()
                .unwrap()
                .parse()
                .unwrap();
            assert!((f64::from(width) - 2.0 * of_svg).abs() <= 2.0, "{width} for {of_svg}");
        } else {
            assert!(picture.is_err());
        }
    }
}

/// The fields of a line of CSV that has no quotes but those of the one label.
#[cfg(feature = "parquet")]
fn fields(line: &str) -> Vec<String> {
    let line = line.replace("\"a, \"\"b\"\"\"", "LABEL");
    line.split(',')
        .map(|field| field.replace("LABEL", "a, \"b\""))
        .collect()
}

#[cfg(feature = "parquet")]
#[test]
fn parquet_reads_back_as_the_csv_says() {
    use parquet::file::reader::{FileReader, SerializedFileReader};
    use parquet::record::Field;
    let bench = Bench::new();
    bench.write("small.toml", CAMPAIGN);
    let run = bench.run(&["campaign", "small.toml", "-o", "all.csv", "--parquet", "all.parquet"]);
    assert_eq!(run.status, 0, "{}", run.errors);
    let csv = bench.read("all.csv");
    let mut lines = csv.lines().filter(|line| !line.starts_with('#'));
    let names = fields(lines.next().unwrap());
    let rows: Vec<Vec<String>> = lines.map(fields).collect();
    let file = std::fs::File::open(bench.path("all.parquet")).unwrap();
    let reader = SerializedFileReader::new(file).unwrap();
    let about = reader.metadata().file_metadata();
    let keys = about.key_value_metadata().unwrap();
    let of = |key: &str| {
        let found = keys.iter().find(|entry| entry.key == key);
        found
            .and_then(|entry| entry.value.clone())
            .unwrap_or_else(|| panic!("no {key}"))
    };
    assert_eq!(
        (of("halfpulse.seed"), of("halfpulse.shard")),
        ("5".into(), "1/1".into())
    );
    assert_eq!(of("halfpulse.campaign"), "small");
    assert!(of("halfpulse.version").starts_with("halfpulse "));
    assert!(csv.contains(&format!("# checksum {}", of("halfpulse.checksum"))));
    assert!(of("halfpulse.toml").contains("scene.noise.snr_db"));
    assert_eq!(about.num_rows(), 36);
    let (mut numbers, mut missing) = (0, 0);
    for (row, wanted) in reader.get_row_iter(None).unwrap().zip(&rows) {
        let row = row.unwrap();
        let columns: Vec<_> = row.get_column_iter().collect();
        assert_eq!(columns.len(), names.len());
        for (((name, field), wanted), column) in columns.into_iter().zip(wanted).zip(&names) {
            assert_eq!(name, column);
            match field {
                Field::Null => {
                    missing += 1;
                    assert_eq!(wanted, "", "{name}");
                }
                Field::Long(value) => assert_eq!(value.to_string(), *wanted, "{name}"),
                Field::Float(value) => assert_eq!(*value, wanted.parse::<f32>().unwrap(), "{name}"),
                Field::Double(value) => {
                    numbers += 1;
                    assert_eq!(*value, wanted.parse::<f64>().unwrap(), "{name}");
                }
                Field::Str(value) => assert_eq!(value, wanted, "{name}"),
                other => panic!("{name}: {other:?}"),
            }
        }
    }
    assert!(numbers > 36 && missing > 18, "{numbers} numbers, {missing} missing");
    // Summed up again from the CSV, the same bytes; and nothing of results that are not whole.
    let again = bench.run(&["campaign", "all.csv", "--parquet", "again.parquet"]);
    assert_eq!(again.status, 0, "{}", again.errors);
    let bytes = |name: &str| std::fs::read(bench.path(name)).unwrap();
    assert_eq!(bytes("again.parquet"), bytes("all.parquet"));
    bench.write("cut.csv", &csv[..csv.len() - 30]);
    let error = bench.run(&["campaign", "cut.csv", "--parquet", "cut.parquet"]);
    assert!(error.error().contains("is not complete"));
    assert!(!bench.path("cut.parquet").exists() && !bench.path("cut.parquet.part").exists());
}
