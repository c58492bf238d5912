use super::*;
use halfpulse::AdcFormat;
use proptest::prelude::*;
use std::path::PathBuf;
use tempfile::TempDir;

const TWELVE: Coding = Coding {
    bits: Some(12),
    codes: CodeKind::Signed,
    full_scale: None,
};

fn file(folder: &TempDir, name: &str, bytes: impl AsRef<[u8]>) -> PathBuf {
    let path = folder.path().join(name);
    std::fs::write(&path, bytes).unwrap();
    path
}

/// A `.npy` file by the letter of numpy.lib.format, version 1.
fn npy(descr: &str, fortran: &str, shape: &str, data: &[u8]) -> Vec<u8> {
    let mut header = format!("{{'descr': '{descr}', 'fortran_order': {fortran}, 'shape': {shape}, }}");
    while !(10 + header.len() + 1).is_multiple_of(64) {
        header.push(' ');
    }
    header.push('\n');
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend((header.len() as u16).to_le_bytes());
    bytes.extend(header.as_bytes());
    bytes.extend(data);
    bytes
}

fn le16(values: &[i16]) -> Vec<u8> {
    values.iter().flat_map(|v| v.to_le_bytes()).collect()
}

/// The error's text, which must be one line with a remedy.
fn refusal(path: &Path, coding: &Coding) -> String {
    let text = read(path, coding).expect_err("must be refused").to_string();
    assert!(text.contains("; ") && !text.contains('\n'), "{text}");
    assert!(text.starts_with(&path.display().to_string()), "{text}");
    text
}

#[test]
fn npy_of_every_type_and_shape() {
    let folder = TempDir::new().unwrap();
    let path = file(
        &folder,
        "a.npy",
        npy("<i2", "False", "(2, 3)", &le16(&[1, 2, 3, -4, -5, 2047])),
    );
    let got = read(&path, &TWELVE).unwrap();
    assert_eq!(got.shots, vec![vec![1, 2, 3], vec![-4, -5, 2047]]);
    assert_eq!(got.format, AdcFormat::signed(12));
    assert_eq!((got.sample_rate, got.first_sample_s), (None, None));

    let data: Vec<u8> = [5i32, -2048].iter().flat_map(|v| v.to_le_bytes()).collect();
    let path = file(&folder, "b.npy", npy("<i4", "False", "(2,)", &data));
    assert_eq!(read(&path, &TWELVE).unwrap().shots, vec![vec![5, -2048]]);

    let data: Vec<u8> = [0.5f32, -1.0, 1.0].iter().flat_map(|v| v.to_le_bytes()).collect();
    let path = file(&folder, "c.npy", npy("<f4", "False", "(3,)", &data));
    let got = read(&path, &Coding::default()).unwrap();
    assert_eq!(got.shots, vec![vec![16384, -32768, 32767]]);
    assert_eq!(got.format, AdcFormat::signed(16));

    let data: Vec<u8> = [2.0f64, -1.0].iter().flat_map(|v| v.to_le_bytes()).collect();
    let path = file(&folder, "d.npy", npy("<f8", "True", "(2,)", &data));
    let wide = Coding {
        full_scale: Some(4.0),
        ..Coding::default()
    };
    assert_eq!(read(&path, &wide).unwrap().shots, vec![vec![16384, -8192]]);
}

#[test]
fn npy_that_cannot_be_used_is_refused_with_the_reason() {
    let folder = TempDir::new().unwrap();
    let good = npy("<i2", "False", "(4,)", &le16(&[1, 2, 3, 4]));
    for (name, bytes, word) in [
        ("empty.npy", vec![], "is empty"),
        ("short.npy", good[..good.len() - 3].to_vec(), "truncated: 5 of 8 bytes"),
        ("header.npy", good[..40].to_vec(), "truncated within its header"),
        ("magic.npy", b"PK\x03\x04 something".to_vec(), "not an .npy file"),
        ("version.npy", b"\x93NUMPY\x09\x00\x10\x00".to_vec(), "version 9"),
        ("long.npy", [good.clone(), vec![0; 2]].concat(), "2 bytes more"),
        (
            "big.npy",
            npy(">i2", "False", "(4,)", &le16(&[1, 2, 3, 4])),
            "big-endian",
        ),
        ("u8.npy", npy("|u1", "False", "(4,)", &[1, 2, 3, 4]), "type |u1"),
        (
            "fortran.npy",
            npy("<i2", "True", "(2, 2)", &le16(&[1, 2, 3, 4])),
            "Fortran order",
        ),
        (
            "cube.npy",
            npy("<i2", "False", "(1, 2, 2)", &le16(&[1, 2, 3, 4])),
            "3 dimensions",
        ),
        ("scalar.npy", npy("<i2", "False", "()", &le16(&[1])), "0 dimensions"),
        ("none.npy", npy("<i2", "False", "(0,)", &[]), "holds no sample"),
        (
            "huge.npy",
            npy("<i2", "False", "(9999999999, 99999999999)", &[]),
            "more than a record can be",
        ),
        (
            "garbled.npy",
            npy("<i2", "False", "(four,)", &[]),
            "header that cannot be read",
        ),
        (
            "range.npy",
            npy("<i2", "False", "(3, 1)", &le16(&[1, 2, 2048])),
            "shot 2, sample 0: 2048 is outside",
        ),
        (
            "nan.npy",
            npy("<f4", "False", "(1,)", &f32::NAN.to_le_bytes()),
            "sample 0: NaN",
        ),
        (
            "inf.npy",
            npy("<f8", "False", "(1,)", &f64::INFINITY.to_le_bytes()),
            "sample 0: inf",
        ),
        (
            "loud.npy",
            npy("<f4", "False", "(1,)", &1.5f32.to_le_bytes()),
            "beyond full scale",
        ),
        ("kind.txt", good.clone(), "ending"),
    ] {
        let path = file(&folder, name, bytes);
        let text = refusal(&path, &TWELVE);
        assert!(text.contains(word), "{name}: {text}");
    }
    let path = file(&folder, "bits.npy", &good);
    assert!(refusal(&path, &Coding::default()).contains("how many bits"));
    assert!(refusal(&folder.path().join("missing.npy"), &TWELVE).contains("no such file"));
    std::fs::create_dir(folder.path().join("folder.npy")).unwrap();
    assert!(refusal(&folder.path().join("folder.npy"), &TWELVE).contains("is a folder"));
}

#[test]
fn offset_binary_codes_are_centred() {
    let folder = TempDir::new().unwrap();
    let offset = Coding {
        codes: CodeKind::OffsetBinary,
        ..TWELVE
    };
    let path = file(&folder, "a.csv", "0\n2048\n4095\n");
    assert_eq!(read(&path, &offset).unwrap().shots, vec![vec![-2048, 0, 2047]]);
    let path = file(&folder, "b.csv", "0\n2048\n-1\n");
    assert!(refusal(&path, &offset).contains("b.csv:3: -1 is outside the range of 12 offset-binary bits, 0 to 4095"));
}

#[test]
fn csv_with_and_without_times() {
    let folder = TempDir::new().unwrap();
    // Windows line ends, a blank line and a byte order mark.
    let path = file(&folder, "a.csv", "\u{feff}1,10\r\n\r\n-2,20\r\n3,30\r\n");
    let got = read(&path, &TWELVE).unwrap();
    assert_eq!(got.shots, vec![vec![1, -2, 3], vec![10, 20, 30]]);
    assert_eq!((got.sample_rate, got.first_sample_s), (None, None));

    let path = file(
        &folder,
        "b.csv",
        "time_s, value\n6.00e-6, 0.5\n6.01e-6, -0.25\n6.02e-6, 0\n",
    );
    let got = read(&path, &Coding::default()).unwrap();
    assert_eq!(got.shots, vec![vec![16384, -8192, 0]]);
    let rate = got.sample_rate.unwrap();
    assert!(rate.agrees_with(100e6) && !rate.agrees_with(100.1e6), "{rate:?}");
    assert!((got.first_sample_s.unwrap() - 6e-6).abs() < 1e-15);
}

#[test]
fn csv_that_cannot_be_used_names_the_line() {
    let folder = TempDir::new().unwrap();
    for (name, text, word) in [
        ("empty.csv", "", "is empty"),
        ("header.csv", "time_s,value\n", "holds no sample"),
        ("text.csv", "1\r\n2\r\nthree\r\n", "text.csv:3: 'three' is not a number"),
        ("title.csv", "\nvoltage\n1\n", "title.csv:2: 'voltage'"),
        ("hole.csv", "1,2\n3,\n", "hole.csv:2: an empty cell"),
        ("ragged.csv", "1,2\n3\n", "ragged.csv:2: 1 columns where"),
        ("semicolon.csv", "1;2\n3;4\n", "put commas between columns"),
        ("only.csv", "time_s\n1\n", "0 columns of values"),
        ("nan.csv", "0.5\nnan\n", "nan.csv:2: NaN"),
        ("time.csv", "time_s,value\n0,1\nnan,2\n", "time.csv:3: the time is not"),
        ("back.csv", "time_s,value\n2,1\n1,2\n", "do not increase"),
        ("gap.csv", "time_s,value\n0,1\n1,2\n3,2\n4,2\n", "not evenly spaced"),
        ("range.csv", "1\n2\n5000\n", "range.csv:3: 5000 is outside"),
        ("large.csv", "1\n99999999999\n", "beyond full scale"),
    ] {
        let path = file(&folder, name, text);
        let text = refusal(&path, &TWELVE);
        assert!(text.contains(word), "{name}: {text}");
    }
    let path = file(&folder, "binary.csv", [0xff, 0xfe, 0x00]);
    assert!(refusal(&path, &TWELVE).contains("not text"));
}

#[test]
fn wav_of_integers_and_floats() {
    let folder = TempDir::new().unwrap();
    let path = folder.path().join("a.wav");
    write(&path, &[vec![1, -2, 2047]], 50e6, 0.0).unwrap();
    let got = read(&path, &TWELVE).unwrap();
    assert_eq!(got.shots, vec![vec![1, -2, 2047]]);
    assert_eq!(got.sample_rate.unwrap().hertz, 50e6);

    let spec = hound::WavSpec {
        channels: 1,
        sample_rate: 100_000_000,
        bits_per_sample: 32,
        sample_format: hound::SampleFormat::Float,
    };
    let path = folder.path().join("b.wav");
    let mut writer = hound::WavWriter::create(&path, spec).unwrap();
    writer.write_sample(-0.5f32).unwrap();
    writer.finalize().unwrap();
    assert_eq!(read(&path, &Coding::default()).unwrap().shots, vec![vec![-16384]]);

    let stereo = hound::WavSpec { channels: 2, ..spec };
    let path = folder.path().join("c.wav");
    let mut writer = hound::WavWriter::create(&path, stereo).unwrap();
    writer.write_sample(0.0f32).unwrap();
    writer.write_sample(0.0f32).unwrap();
    writer.finalize().unwrap();
    assert!(refusal(&path, &TWELVE).contains("2 channels"));
}

#[test]
fn wav_that_cannot_be_used_is_refused() {
    let folder = TempDir::new().unwrap();
    let path = folder.path().join("a.wav");
    write(&path, &[vec![7; 100]], 50e6, 0.0).unwrap();
    let good = std::fs::read(&path).unwrap();
    let cut = file(&folder, "cut.wav", &good[..good.len() - 51]);
    assert!(refusal(&cut, &TWELVE).contains("truncated"));
    let cut = file(&folder, "head.wav", &good[..20]);
    assert!(refusal(&cut, &TWELVE).contains("truncated"));
    let empty = file(&folder, "empty.wav", "");
    assert!(refusal(&empty, &TWELVE).contains("is empty"));
    let other = file(&folder, "other.wav", "this is no sound at all, nor a record");
    assert!(refusal(&other, &TWELVE).contains("not a WAV file"));
    assert!(
        write(&path, &[vec![1], vec![2]], 50e6, 0.0)
            .unwrap_err()
            .to_string()
            .contains("one shot")
    );
    assert!(write(&path, &[vec![1]], 0.0, 0.0).is_err());
    assert!(
        write(&folder.path().join("no/such.npy"), &[vec![1]], 1.0, 0.0)
            .unwrap_err()
            .to_string()
            .contains("folder")
    );
    assert!(write(&path, &[], 50e6, 0.0).is_err());
}

#[test]
fn pulses_are_read_as_written_and_checked() {
    let folder = TempDir::new().unwrap();
    let path = folder.path().join("p.npy");
    npy::write_pulse(&path, &[0.0, 0.5, -1.0]).unwrap();
    assert_eq!(npy::read_pulse(&path).unwrap(), vec![0.0, 0.5, -1.0]);
    let path = file(&folder, "i.npy", npy("<i2", "False", "(1,)", &le16(&[1])));
    assert!(npy::read_pulse(&path).unwrap_err().to_string().contains("floats"));
    let path = file(&folder, "n.npy", npy("<f4", "False", "(1,)", &f32::NAN.to_le_bytes()));
    assert!(npy::read_pulse(&path).unwrap_err().to_string().contains("sample 0"));
    let path = file(&folder, "t.npy", npy("<f4", "False", "(1, 1)", &[0; 4]));
    assert!(npy::read_pulse(&path).unwrap_err().to_string().contains("1-D"));
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn every_kind_of_file_gives_back_what_was_written(
        shot in prop::collection::vec(-2048i16..2048, 2..80), rate in 1u32..200, first in 0u32..100,
    ) {
        let folder = TempDir::new().unwrap();
        let (rate, first) = (f64::from(rate) * 1e6, f64::from(first) * 1e-6);
        for name in ["a.npy", "a.csv", "a.wav"] {
            let path = folder.path().join(name);
            write(&path, std::slice::from_ref(&shot), rate, first).unwrap();
            let got = read(&path, &TWELVE).unwrap();
            prop_assert_eq!(&got.shots, &vec![shot.clone()]);
            if let Some(stated) = got.sample_rate {
                prop_assert!(stated.agrees_with(rate));
            }
            if let Some(stated) = got.first_sample_s {
                prop_assert!((stated - first).abs() < 1e-14);
            }
        }
    }

    #[test]
    fn no_bytes_make_a_reader_panic(bytes in prop::collection::vec(any::<u8>(), 0..200), cut in 0usize..200) {
        let folder = TempDir::new().unwrap();
        let good = folder.path().join("good.npy");
        write(&good, &[vec![1, 2, 3]], 1e6, 0.0).unwrap();
        let mut damaged = std::fs::read(&good).unwrap();
        for (at, byte) in bytes.iter().enumerate() {
            let index = cut.wrapping_add(at * 7) % damaged.len();
            if at % 5 == 0 { damaged[index] = *byte; }
        }
        for (name, content) in [("a.npy", &bytes), ("a.csv", &bytes), ("a.wav", &bytes), ("b.npy", &damaged)] {
            let path = folder.path().join(name);
            std::fs::write(&path, content).unwrap();
            let _ = read(&path, &TWELVE);
            let _ = npy::read_pulse(&path);
        }
    }
}
