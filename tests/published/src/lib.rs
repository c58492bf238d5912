//! Reads the tables of `tests/published/`, which `tests/published/README.md` describes.
//!
//! Plain comma-separated numbers and words, no quotes. A table that is missing or malformed is a
//! mistake in this repository, so everything here panics with file, line and column.

pub mod oracle;
pub mod page;
pub mod readme;

use std::path::PathBuf;

fn text(name: &str) -> String {
    let path = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join(name);
    std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// A table with a header line.
#[derive(Debug)]
pub struct Table {
    name: String,
    header: Vec<String>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// Reads `tests/published/{name}`.
    #[must_use]
    pub fn read(name: &str) -> Self {
        let text = text(name);
        let mut lines = text
            .lines()
            .map(|line| line.split(',').map(|cell| cell.trim().to_owned()).collect::<Vec<_>>());
        let header = lines.next().unwrap_or_default();
        let rows: Vec<_> = lines.collect();
        for (index, row) in rows.iter().enumerate() {
            assert_eq!(row.len(), header.len(), "{name}, line {}: number of cells", index + 2);
        }
        assert!(!rows.is_empty(), "{name} has no rows");
        Self {
            name: name.to_owned(),
            header,
            rows,
        }
    }

    /// The rows in the order of the file.
    pub fn rows(&self) -> impl Iterator<Item = Row<'_>> {
        (0..self.rows.len()).map(|index| Row { table: self, index })
    }

    /// The first row whose `column` holds `word`.
    #[must_use]
    pub fn row_where(&self, column: &str, word: &str) -> Row<'_> {
        self.rows()
            .find(|row| row.text(column) == word)
            .unwrap_or_else(|| panic!("{}: no row with {column} = {word}", self.name))
    }
}

/// One row of a [`Table`].
#[derive(Clone, Copy)]
pub struct Row<'t> {
    table: &'t Table,
    index: usize,
}

impl std::fmt::Debug for Row<'_> {
    /// The row alone, for the messages of checks.
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let cells = self.table.rows.get(self.index).map(|row| row.join(","));
        write!(
            f,
            "{}, line {}: {}",
            self.table.name,
            self.index + 2,
            cells.unwrap_or_default()
        )
    }
}

impl<'t> Row<'t> {
    /// A cell as it stands in the file.
    #[must_use]
    pub fn text(&self, column: &str) -> &'t str {
        let place = self.table.header.iter().position(|name| name == column);
        let place = place.unwrap_or_else(|| panic!("{}: no column {column}", self.table.name));
        &self.table.rows[self.index][place]
    }

    /// A cell as a number.
    #[must_use]
    pub fn number(&self, column: &str) -> f64 {
        self.text(column)
            .parse()
            .unwrap_or_else(|error| panic!("{}, line {}, column {column}: {error}", self.table.name, self.index + 2))
    }

    /// A cell as a number, `None` if it is empty.
    #[must_use]
    pub fn optional_number(&self, column: &str) -> Option<f64> {
        (!self.text(column).is_empty()).then(|| self.number(column))
    }

    /// A cell as a count.
    #[must_use]
    pub fn count(&self, column: &str) -> usize {
        let value = self.number(column);
        assert!(
            value >= 0.0 && value.fract() == 0.0,
            "{}: {column} is no count",
            self.table.name
        );
        value as usize
    }
}

/// A file without a header: one record a line.
#[must_use]
pub fn number_rows(name: &str) -> Vec<Vec<f64>> {
    let rows: Vec<Vec<f64>> = text(name)
        .lines()
        .enumerate()
        .map(|(line, cells)| {
            let number = |cell: &str| {
                cell.parse()
                    .unwrap_or_else(|error| panic!("{name}, line {}: {cell}: {error}", line + 1))
            };
            cells.split(',').map(number).collect()
        })
        .collect();
    assert!(!rows.is_empty(), "{name} is empty");
    rows
}

/// A file of ADC codes without a header: one record a line.
#[must_use]
pub fn code_rows(name: &str) -> Vec<Vec<i16>> {
    let code = |value: &f64| {
        let whole = value.fract() == 0.0 && (-32768.0..=32767.0).contains(value);
        assert!(whole, "{name}: {value} is no 16-bit code");
        *value as i16
    };
    number_rows(name)
        .iter()
        .map(|row| row.iter().map(code).collect())
        .collect()
}

/// The delay-line A-scan: 900 codes of 16 bits with full scale 1, at 100 MS/s, the first one
/// 6.0 µs after the trigger.
#[must_use]
pub fn delay_line_codes() -> Vec<i16> {
    Table::read("delay_line_ascan.csv")
        .rows()
        .map(|row| (row.number("y") * 32768.0).round() as i16)
        .collect()
}

/// The records of one or two echoes, `vectors/pairs.csv`.
pub mod pairs {
    /// Samples of the reference pulse before its origin. What the table calls a delay is where the origin goes.
    pub const BEFORE_ORIGIN: usize = 50;
    /// Codes of an echo of amplitude 1: 0.4 of a 12-bit full scale.
    pub const UNIT: f64 = 0.4 * 2048.0;

    /// The pulse, from -50 to +75 samples about its origin, which is sample 128 of the table; beyond that it is below 0.1 %.
    #[must_use]
    pub fn reference() -> Vec<f32> {
        const ORIGIN: usize = 128;
        super::number_rows("vectors/pair_reference.csv")[0][ORIGIN - BEFORE_ORIGIN..ORIGIN + 75]
            .iter()
            .map(|&x| x as f32)
            .collect()
    }

    /// The pulse itself, 256 samples with its origin at sample 128 and an envelope peak of 1.
    #[must_use]
    pub fn whole_reference() -> Vec<f64> {
        let codes = super::number_rows("vectors/pair_reference.csv");
        codes[0].iter().map(|code| code / 32_111.66).collect()
    }

    /// Adds an echo of the pulse whose origin lies at `place`: the band-limited shift, by the pulse's spectrum.
    pub fn add(samples: &mut [f64], place: f64, amplitude: f64) {
        static SPECTRUM: std::sync::OnceLock<Vec<(f64, f64)>> = std::sync::OnceLock::new();
        let spectrum = SPECTRUM.get_or_init(|| crate::oracle::transform(&whole_reference()));
        let n = 2 * (spectrum.len() - 1);
        for (i, sample) in samples.iter_mut().enumerate() {
            let t = i as f64 - place + 128.0;
            if t < 0.0 || t > n as f64 - 1.0 {
                continue;
            }
            let turn = std::f64::consts::TAU * t / n as f64;
            let mut sum = 0.5 * spectrum[0].0;
            for (bin, &(re, im)) in spectrum.iter().enumerate().take(n / 2).skip(1) {
                let (sin, cos) = (turn * bin as f64).sin_cos();
                sum += re * cos - im * sin;
            }
            *sample += amplitude * 2.0 * sum / n as f64;
        }
    }
}
