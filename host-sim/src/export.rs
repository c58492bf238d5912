//! Summaries of campaigns as a table for people, and as CSV and JSON for programs.

mod json;
#[cfg(feature = "parquet")]
pub mod parquet;

pub use json::json;

use crate::campaign::row::quoted;
use crate::campaign::summary::{Summary, Tally, percent, short};
use crate::statistics::share_interval;
use comfy_table::presets::UTF8_HORIZONTAL_ONLY;
use comfy_table::{CellAlignment, ContentArrangement, Table};
use std::collections::BTreeMap;
use std::fmt::Write as _;

/// What the columns of [`table`] mean.
pub const LEGEND: &str = "\
Errors (bias, spread) in micrometres, of readings that are not gross; shares in per cent, each with its 95 % limits.
inside U: of the readings without a doubt, those within their expanded uncertainty. Without a doubt and wrong, as
too thick + too thin: >U, >2U, gross (beyond U and a quarter wavelength; +n more where there was no wall at all).
gross %: all grossly wrong readings, doubted or not. bound: spread over the Cramér-Rao bound.
error: of the readings without a doubt, gross ones included, the value below which 2.5, 50 and 97.5 % of the errors
lie, and the worst; from 513 on within 0.5 %. These columns are left out where the terminal is too narrow.";

/// Shares of the errors that tables tell.
const QUANTILES: [f64; 3] = [0.025, 0.5, 0.975];

fn sides(sides: crate::campaign::summary::Sides) -> String {
    format!("{}+{}", sides.over, sides.under)
}

/// Columns of a table; the last two are left out if there is no room.
const FIGURES: [&str; 13] = [
    "runs",
    "bias",
    "spread",
    "bound",
    "inside U",
    ">U",
    ">2U",
    "gross",
    "gross %",
    "doubted %",
    "refused %",
    "error 2.5 | 50 | 97.5 %",
    "worst",
];

fn row_of(tally: &Tally) -> Vec<String> {
    let bias = tally
        .errors
        .mean()
        .map_or_else(String::new, |mean| match tally.errors.mean_interval() {
            Some((_, high)) if high.is_finite() => format!("{} ±{}", short(mean), short(high - mean)),
            _ => short(mean),
        });
    let with = |value: Option<f64>, interval: Option<(f64, f64)>| match (value, interval) {
        (Some(value), Some((low, high))) => format!("{} ({}..{})", short(value), short(low), short(high)),
        (Some(value), None) => short(value),
        _ => String::new(),
    };
    let bound = tally.over_bound();
    let mut gross = sides(tally.gross);
    if tally.undoubted_phantom > 0 {
        let _ = write!(gross, "+{}", tally.undoubted_phantom);
    }
    vec![
        tally.runs.to_string(),
        bias,
        with(tally.errors.deviation(), tally.errors.deviation_interval()),
        with(bound.map(|(ratio, _)| ratio), bound.map(|(_, interval)| interval)),
        percent(tally.inside, tally.undoubted),
        sides(tally.outside),
        sides(tally.beyond_twice),
        gross,
        percent(tally.all_gross(), tally.runs),
        percent(tally.doubted, tally.runs),
        percent(tally.all_refused(), tally.runs),
        QUANTILES
            .iter()
            .filter_map(|share| tally.signed_errors.quantile(*share).map(short))
            .collect::<Vec<_>>()
            .join(" | "),
        tally.signed_errors.worst().map_or_else(String::new, short),
    ]
}

fn words(text: &mut String, title: &str, words: &BTreeMap<String, u64>) {
    if !words.is_empty() {
        let list: Vec<String> = words.iter().map(|(word, count)| format!("{word} {count}")).collect();
        let _ = writeln!(text, "{title}: {}", list.join(", "));
    }
}

/// The table of a campaign, with what was refused and doubted below it.
#[must_use]
pub fn table(summary: &Summary) -> String {
    table_of(summary, &FIGURES)
}

/// The same without the errors' quantiles if the lines would be longer than a terminal's.
#[must_use]
pub fn table_within(summary: &Summary, width: usize) -> String {
    let text = table(summary);
    if text.lines().any(|line| line.chars().count() > width) {
        return table_of(summary, FIGURES.get(..FIGURES.len() - 2).unwrap_or_default());
    }
    text
}

fn table_of(summary: &Summary, figures: &[&str]) -> String {
    let mut table = Table::new();
    table.load_style(UTF8_HORIZONTAL_ONLY);
    table.set_content_arrangement(ContentArrangement::Disabled);
    let names = summary
        .axes
        .iter()
        .map(|axis| axis.rsplit('.').next().unwrap_or(axis).to_string());
    let row = |tally: &Tally| row_of(tally).into_iter().take(figures.len());
    table.set_header(names.chain(figures.iter().map(|name| (*name).to_string())));
    for (labels, tally) in summary.labels.iter().zip(&summary.cells) {
        table.add_row(labels.iter().cloned().chain(row(tally)));
    }
    if summary.cells.len() > 1 {
        let labels = (0..summary.axes.len()).map(|axis| if axis == 0 { "all" } else { "" }.to_string());
        table.add_row(labels.chain(row(&summary.all)));
    }
    for column in summary.axes.len()..summary.axes.len() + figures.len() {
        if let Some(column) = table.column_mut(column) {
            column.set_cell_alignment(CellAlignment::Right);
        }
    }
    let text = table.to_string();
    // A rule below the header is enough.
    let lines: Vec<&str> = text
        .lines()
        .map(str::trim_end)
        .filter(|line| !line.starts_with('─'))
        .collect();
    let mut text = format!("{}\n{}\n", summary.title, lines.join("\n"));
    words(&mut text, "refused", &summary.all.refused);
    words(&mut text, "doubted", &summary.all.doubts);
    words(&mut text, "largest term", &summary.all.dominating);
    text
}

/// One line per cell, with every count and every limit.
#[must_use]
pub fn csv(summary: &Summary) -> String {
    let mut text = format!("# {}\n# {MADE_BY}, campaign {}\ncell", summary.title, summary.checksum);
    for axis in &summary.axes {
        let _ = write!(text, ",{}", quoted(axis));
    }
    text.push_str(
        ",runs,undoubted,doubted,refused,bias_um,bias_low_um,bias_high_um,spread_um,spread_low_um,spread_high_um,\
         over_bound,over_bound_low,over_bound_high,inside,inside_share,inside_low,inside_high,beyond_over,beyond_under,\
         beyond_twice_over,beyond_twice_under,gross_over,gross_under,undoubted_phantom,confidently_wrong_share,\
         confidently_wrong_low,confidently_wrong_high,gross_share,gross_low,gross_high,doubted_share,doubted_low,\
         doubted_high,refused_share,refused_low,refused_high,doubted_inside,error_low_um,error_median_um,error_high_um,\
         error_worst_um,worst_over_u,refusals,doubts\n",
    );
    for (cell, (labels, tally)) in summary.labels.iter().zip(&summary.cells).enumerate() {
        let _ = write!(text, "{cell}");
        for label in labels {
            let _ = write!(text, ",{}", quoted(label));
        }
        csv_line(&mut text, tally);
    }
    text
}

/// What made it.
const MADE_BY: &str = concat!("made by halfpulse ", env!("CARGO_PKG_VERSION"));

fn csv_line(text: &mut String, tally: &Tally) {
    let _ = write!(
        text,
        ",{},{},{},{}",
        tally.runs,
        tally.undoubted,
        tally.doubted,
        tally.all_refused()
    );
    let errors = &tally.errors;
    let bound = tally.over_bound();
    for (value, interval) in [
        (errors.mean(), errors.mean_interval()),
        (errors.deviation(), errors.deviation_interval()),
        (bound.map(|(ratio, _)| ratio), bound.map(|(_, interval)| interval)),
    ] {
        for value in [value, interval.map(|(low, _)| low), interval.map(|(_, high)| high)] {
            match value {
                Some(value) => {
                    let _ = write!(text, ",{value:.5}");
                }
                None => text.push(','),
            }
        }
    }
    let share = |text: &mut String, count: u64, all: u64| {
        if all == 0 {
            text.push_str(",,,");
            return;
        }
        let (low, high) = share_interval(count, all);
        let _ = write!(text, ",{:.6},{low:.6},{high:.6}", count as f64 / all as f64);
    };
    let _ = write!(text, ",{}", tally.inside);
    share(text, tally.inside, tally.undoubted);
    for sides in [tally.outside, tally.beyond_twice, tally.gross] {
        let _ = write!(text, ",{},{}", sides.over, sides.under);
    }
    let _ = write!(text, ",{}", tally.undoubted_phantom);
    share(text, tally.confidently_wrong(), tally.runs);
    share(text, tally.all_gross(), tally.runs);
    share(text, tally.doubted, tally.runs);
    share(text, tally.all_refused(), tally.runs);
    let _ = write!(text, ",{}", tally.doubted_inside);
    let errors = &tally.signed_errors;
    for value in QUANTILES
        .map(|share| errors.quantile(share))
        .into_iter()
        .chain([errors.worst()])
    {
        match value {
            Some(value) => {
                let _ = write!(text, ",{value:.5}");
            }
            None => text.push(','),
        }
    }
    let list = |words: &BTreeMap<String, u64>| {
        let words: Vec<String> = words.iter().map(|(word, count)| format!("{word}={count}")).collect();
        words.join(" ")
    };
    let _ = writeln!(
        text,
        ",{:.3},{},{}",
        tally.worst,
        list(&tally.refused),
        list(&tally.doubts)
    );
}
