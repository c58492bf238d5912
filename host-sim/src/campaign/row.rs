//! One run as a line of the results, and back.

use std::fmt::Write as _;

/// The columns of every campaign; those of its axes and draws follow.
pub const COLUMNS: &str = "run,cell,truth_mm,outcome,thickness_mm,standard_uncertainty_mm,coverage_factor,doubts,dominating_term,quarter_wavelength_mm,bound_mm";
const FIXED: usize = 11;

/// A reading.
#[derive(Clone, Debug, PartialEq)]
pub struct RowReading {
    /// Thickness.
    pub thickness_mm: f32,
    /// Its standard uncertainty.
    pub standard_uncertainty_mm: f32,
    /// k.
    pub coverage_factor: f32,
    /// Words of the doubts; none: it is to be signed for.
    pub doubts: Vec<String>,
    /// Word of the largest term of the budget.
    pub dominating: String,
}

/// One run.
#[derive(Clone, Debug, PartialEq)]
pub struct Row {
    /// Its number in the campaign.
    pub run: u64,
    /// Its cell.
    pub cell: u64,
    /// The wall; `None` if the record holds no echo of it, so that any reading is wrong.
    pub truth_mm: Option<f64>,
    /// A quarter of the wavelength in the wall at the probe's centre frequency.
    pub quarter_mm: f64,
    /// Standard deviation at the Cramér-Rao bound, where it is defined.
    pub bound_mm: Option<f64>,
    /// A reading, or the word of the refusal.
    pub outcome: Result<RowReading, String>,
    /// What stands in the campaign's own columns.
    pub shown: Vec<String>,
}

/// A text as a field of a CSV file (RFC 4180).
#[must_use]
pub fn quoted(text: &str) -> String {
    if text.contains([',', '"', '\n', '\r']) {
        format!("\"{}\"", text.replace('"', "\"\""))
    } else {
        text.to_string()
    }
}

/// The fields of a line of CSV, without their quotes (RFC 4180).
#[must_use]
pub fn fields(line: &str) -> Vec<String> {
    let mut fields = vec![String::new()];
    let (mut inside, mut quote_before) = (false, false);
    for character in line.chars() {
        let Some(field) = fields.last_mut() else { break };
        match character {
            '"' => {
                // Two within quotes stand for one.
                if !inside && quote_before {
                    field.push('"');
                }
                inside = !inside;
            }
            ',' if !inside => fields.push(String::new()),
            other => field.push(other),
        }
        quote_before = character == '"' && !inside;
    }
    fields
}

impl Row {
    /// The line, without its end. Numbers have the digits that read back the same.
    #[must_use]
    pub fn line(&self) -> String {
        let optional = |value: Option<f64>| value.map_or_else(String::new, |value| value.to_string());
        let mut line = format!("{},{},{},", self.run, self.cell, optional(self.truth_mm));
        // Writing to a string cannot fail.
        let _ = match &self.outcome {
            Ok(reading) => write!(
                line,
                "reading,{},{},{},{},{}",
                reading.thickness_mm,
                reading.standard_uncertainty_mm,
                reading.coverage_factor,
                reading.doubts.join("+"),
                reading.dominating
            ),
            Err(reason) => write!(line, "{reason},,,,,"),
        };
        let _ = write!(line, ",{},{}", self.quarter_mm, optional(self.bound_mm));
        for shown in &self.shown {
            line.push(',');
            line.push_str(&quoted(shown));
        }
        line
    }

    /// Reads the columns that every campaign has; `None` if the line is none.
    #[must_use]
    pub fn parse(line: &str) -> Option<Self> {
        let fields: Vec<&str> = line.splitn(FIXED + 1, ',').collect();
        let field = |number: usize| fields.get(number).copied();
        let optional = |text: &str| -> Option<Option<f64>> {
            if text.is_empty() {
                return Some(None);
            }
            text.parse().ok().map(Some)
        };
        let outcome = match field(3)? {
            "" => return None,
            "reading" => Ok(RowReading {
                thickness_mm: field(4)?.parse().ok()?,
                standard_uncertainty_mm: field(5)?.parse().ok()?,
                coverage_factor: field(6)?.parse().ok()?,
                doubts: field(7)?
                    .split('+')
                    .filter(|word| !word.is_empty())
                    .map(str::to_string)
                    .collect(),
                dominating: field(8)?.to_string(),
            }),
            reason => Err(reason.to_string()),
        };
        Some(Self {
            run: field(0)?.parse().ok()?,
            cell: field(1)?.parse().ok()?,
            truth_mm: optional(field(2)?)?,
            quarter_mm: field(9)?.parse().ok()?,
            bound_mm: optional(field(10)?)?,
            outcome,
            shown: Vec::new(),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn lines_read_back() {
        let mut row = Row {
            run: 12,
            cell: 3,
            truth_mm: Some(10.1),
            quarter_mm: 0.296,
            bound_mm: None,
            outcome: Ok(RowReading {
                thickness_mm: 10.123_456,
                standard_uncertainty_mm: 0.001_234_5,
                coverage_factor: 2.0,
                doubts: vec!["few-echoes".into(), "low-signal".into()],
                dominating: "timing".into(),
            }),
            shown: vec!["a, \"b\"".into(), String::new()],
        };
        let line = row.line();
        assert!(line.ends_with(",\"a, \"\"b\"\"\","), "{line}");
        let fields = fields(&line);
        assert_eq!(fields.len(), FIXED + 2);
        assert_eq!(fields[FIXED..], row.shown);
        row.shown.clear();
        assert_eq!(Row::parse(&line), Some(row.clone()));
        row.outcome = Err("no-echo".into());
        row.truth_mm = None;
        assert_eq!(Row::parse(&row.line()), Some(row.clone()));
        for cut in 0..row.line().len() {
            let line = row.line();
            // A cut line may still parse (its last number is shorter): only its missing end tells.
            let _ = Row::parse(&line[..cut]);
        }
        assert_eq!(Row::parse(""), None);
        assert_eq!(Row::parse("1,2,x,reading,1,1,1,,,1,"), None);
    }
}
