//! Results of a campaign as Parquet: a column for each of the CSV's, read from the CSV a group of rows at a time.
//!
//! The CSV stays what a campaign writes, because it can be gone on with; a Parquet file is whole or it is nothing.
//! Provenance stands in the key-value metadata: `halfpulse.version`, `halfpulse.campaign` (its name),
//! `halfpulse.seed`, `halfpulse.shard`, `halfpulse.checksum` and `halfpulse.toml` (the whole campaign, scene and
//! set-up included).

use crate::campaign::results::Reader;
use crate::campaign::row::{self, COLUMNS, Row};
use crate::input_error::InputError;
use crate::output::Unfinished;
use parquet::basic::{Compression, LogicalType, Repetition, Type as Physical};
use parquet::data_type::{ByteArray, ByteArrayType, DoubleType, FloatType, Int64Type};
use parquet::errors::ParquetError;
use parquet::file::metadata::KeyValue;
use parquet::file::properties::WriterProperties;
use parquet::file::writer::SerializedFileWriter;
use parquet::schema::types::Type;
use std::path::Path;
use std::sync::Arc;

/// Rows that are held in memory and written together.
pub const ROWS_OF_A_GROUP: usize = 1 << 16;

/// Values of one column; those that may be missing with a level (1 there, 0 missing) for each row.
enum Values {
    Whole(Vec<i64>),
    Single(Vec<f32>, Vec<i16>),
    Double(Vec<f64>, Vec<i16>),
    Text(Vec<ByteArray>, Vec<i16>),
}

struct Column {
    name: String,
    values: Values,
}

impl Column {
    fn new(name: &str, values: Values) -> Self {
        Self {
            name: name.to_string(),
            values,
        }
    }

    fn schema(&self) -> Result<Type, ParquetError> {
        let (physical, repetition) = match self.values {
            Values::Whole(_) => (Physical::INT64, Repetition::REQUIRED),
            Values::Single(..) => (Physical::FLOAT, Repetition::OPTIONAL),
            Values::Double(..) => (Physical::DOUBLE, Repetition::OPTIONAL),
            Values::Text(..) => (Physical::BYTE_ARRAY, Repetition::OPTIONAL),
        };
        let text = (physical == Physical::BYTE_ARRAY).then_some(LogicalType::String);
        Type::primitive_type_builder(&self.name, physical)
            .with_repetition(repetition)
            .with_logical_type(text)
            .build()
    }

    /// One more row, as the CSV writes it. False: it is not of the column's kind.
    fn push(&mut self, text: &str) -> bool {
        fn optional<T>(values: &mut Vec<T>, levels: &mut Vec<i16>, text: &str, value: Option<T>) -> bool {
            levels.push(i16::from(!text.is_empty()));
            match value {
                _ if text.is_empty() => true,
                Some(value) => {
                    values.push(value);
                    true
                }
                None => false,
            }
        }
        match &mut self.values {
            Values::Whole(values) => match text.parse() {
                Ok(value) => {
                    values.push(value);
                    true
                }
                Err(_) => false,
            },
            Values::Single(values, levels) => optional(values, levels, text, text.parse().ok()),
            Values::Double(values, levels) => optional(values, levels, text, text.parse().ok()),
            Values::Text(values, levels) => optional(values, levels, text, Some(ByteArray::from(text))),
        }
    }

    fn clear(&mut self) {
        match &mut self.values {
            Values::Whole(values) => values.clear(),
            Values::Single(values, levels) => {
                values.clear();
                levels.clear();
            }
            Values::Double(values, levels) => {
                values.clear();
                levels.clear();
            }
            Values::Text(values, levels) => {
                values.clear();
                levels.clear();
            }
        }
    }
}

/// Writes the results in a CSV as Parquet.
///
/// # Errors
/// Results that cannot be read or are not whole; a file that cannot be written.
pub fn write(results: &Path, output: &Path) -> Result<(), InputError> {
    let fault = |error: ParquetError| {
        let what = format!("cannot be written as Parquet ({error})");
        InputError::in_file(output, what, "check the space on its disk")
    };
    let mut columns = columns(results)?;
    let mut reader = Reader::open(results)?;
    let fields = columns
        .iter()
        .map(|column| column.schema().map(Arc::new))
        .collect::<Result<_, _>>()
        .map_err(fault)?;
    let schema = Type::group_type_builder("runs").with_fields(fields).build();
    let properties = WriterProperties::builder()
        .set_compression(Compression::SNAPPY)
        .set_created_by(concat!("halfpulse ", env!("CARGO_PKG_VERSION")).to_string())
        .set_key_value_metadata(Some(provenance(&reader)?))
        .build();
    let file = Unfinished::begin(output)?;
    let mut writer =
        SerializedFileWriter::new(file, Arc::new(schema.map_err(fault)?), Arc::new(properties)).map_err(fault)?;
    let mut rows = 0;
    while let Some((line, _)) = reader.next_row()? {
        push(results, &mut columns, &line)?;
        rows += 1;
        if rows % ROWS_OF_A_GROUP == 0 {
            write_group(&mut writer, &mut columns).map_err(fault)?;
        }
    }
    if !reader.extent().is_some_and(|extent| extent.complete) {
        let remedy = "run the campaign again with this output: it goes on";
        return Err(InputError::in_file(results, "is not complete", remedy));
    }
    if rows % ROWS_OF_A_GROUP != 0 {
        write_group(&mut writer, &mut columns).map_err(fault)?;
    }
    writer.into_inner().map_err(fault)?.finish()
}

fn provenance(reader: &Reader) -> Result<Vec<KeyValue>, InputError> {
    let campaign = reader.campaign()?;
    let version = reader.header().lines().find_map(|line| line.strip_prefix("# made by "));
    Ok([
        ("halfpulse.version", version.unwrap_or_default().to_string()),
        ("halfpulse.campaign", campaign.name.clone()),
        ("halfpulse.seed", campaign.seed.to_string()),
        ("halfpulse.shard", reader.shard().to_string()),
        ("halfpulse.checksum", campaign.checksum()),
        ("halfpulse.toml", campaign.canonical()),
    ]
    .map(|(key, value)| KeyValue::new(key.to_string(), value))
    .into())
}

/// The columns of the results. Those of axes and draws hold numbers if all their values are numbers, which takes a
/// pass over the file.
fn columns(results: &Path) -> Result<Vec<Column>, InputError> {
    let kind = |name: &str| match name {
        "run" | "cell" => Values::Whole(Vec::new()),
        "thickness_mm" | "standard_uncertainty_mm" | "coverage_factor" => Values::Single(Vec::new(), Vec::new()),
        "outcome" | "doubts" | "dominating_term" => Values::Text(Vec::new(), Vec::new()),
        _ => Values::Double(Vec::new(), Vec::new()),
    };
    let mut columns: Vec<Column> = COLUMNS.split(',').map(|name| Column::new(name, kind(name))).collect();
    let fixed = columns.len();
    let mut reader = Reader::open(results)?;
    let names = reader.campaign()?.columns();
    let mut numeric = vec![true; names.len()];
    while let Some((line, _)) = reader.next_row()? {
        let fields = row::fields(&line);
        for (numeric, field) in numeric.iter_mut().zip(fields.iter().skip(fixed)) {
            *numeric &= field.is_empty() || field.parse::<f64>().is_ok();
        }
    }
    for (name, numeric) in names.iter().zip(numeric) {
        // An axis may have any name.
        let name = if columns.iter().any(|column| column.name == *name) {
            format!("campaign.{name}")
        } else {
            name.clone()
        };
        let values = if numeric {
            Values::Double(Vec::new(), Vec::new())
        } else {
            Values::Text(Vec::new(), Vec::new())
        };
        columns.push(Column::new(&name, values));
    }
    Ok(columns)
}

fn push(results: &Path, columns: &mut [Column], line: &str) -> Result<(), InputError> {
    let fields = row::fields(line);
    let fits = fields.len() == columns.len()
        && columns
            .iter_mut()
            .zip(&fields)
            .all(|(column, field)| column.push(field));
    if fits {
        return Ok(());
    }
    let run = Row::parse(line).map_or(0, |row| row.run);
    let what = format!("the row of run {run} has other columns than the header says");
    Err(InputError::in_file(results, what, "bring back a sound copy"))
}

fn write_group(writer: &mut SerializedFileWriter<Unfinished>, columns: &mut [Column]) -> Result<(), ParquetError> {
    let mut group = writer.next_row_group()?;
    for column in columns {
        let Some(mut to) = group.next_column()? else { break };
        match &column.values {
            Values::Whole(values) => to.typed::<Int64Type>().write_batch(values, None, None),
            Values::Single(values, levels) => to.typed::<FloatType>().write_batch(values, Some(levels), None),
            Values::Double(values, levels) => to.typed::<DoubleType>().write_batch(values, Some(levels), None),
            Values::Text(values, levels) => to.typed::<ByteArrayType>().write_batch(values, Some(levels), None),
        }?;
        to.close()?;
        column.clear();
    }
    group.close()?;
    Ok(())
}
