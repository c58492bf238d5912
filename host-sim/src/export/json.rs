//! A campaign's summary as JSON.

use super::QUANTILES;
use crate::campaign::summary::{Sides, Summary, Tally};
use crate::statistics::{Interval, share_interval};
use serde_json::{Map, Value, json};

/// All cells and all of them together, with every count and every limit. Figures that a cell does not have are null.
#[must_use]
pub fn json(summary: &Summary) -> String {
    let cells: Vec<Value> = summary
        .labels
        .iter()
        .zip(&summary.cells)
        .enumerate()
        .map(|(cell, (labels, tally))| {
            let axes: Map<String, Value> = summary
                .axes
                .iter()
                .cloned()
                .zip(labels.iter().cloned().map(Value::String))
                .collect();
            let mut figures = figures(tally);
            if let Value::Object(figures) = &mut figures {
                figures.insert("cell".to_string(), json!(cell));
                figures.insert("axes".to_string(), Value::Object(axes));
            }
            figures
        })
        .collect();
    let all = json!({
        "made_by": concat!("halfpulse ", env!("CARGO_PKG_VERSION")),
        "title": summary.title,
        "campaign": summary.checksum,
        "cells": cells,
        "all": figures(&summary.all),
    });
    format!("{all:#}\n")
}

fn figures(tally: &Tally) -> Value {
    let errors = &tally.signed_errors;
    let [low, median, high] = QUANTILES.map(|share| errors.quantile(share));
    let bound = tally.over_bound();
    json!({
        "runs": tally.runs,
        "undoubted": tally.undoubted,
        "bias_um": figure(tally.errors.mean(), tally.errors.mean_interval()),
        "spread_um": figure(tally.errors.deviation(), tally.errors.deviation_interval()),
        "spread_over_bound": figure(bound.map(|(ratio, _)| ratio), bound.map(|(_, interval)| interval)),
        "inside": share(tally.inside, tally.undoubted),
        "beyond": sides(tally.outside),
        "beyond_twice": sides(tally.beyond_twice),
        "gross": sides(tally.gross),
        "undoubted_phantom": tally.undoubted_phantom,
        "confidently_wrong": share(tally.confidently_wrong(), tally.runs),
        "all_gross": share(tally.all_gross(), tally.runs),
        "doubted": share(tally.doubted, tally.runs),
        "doubted_inside": tally.doubted_inside,
        "refused": share(tally.all_refused(), tally.runs),
        "error_um": {
            "2.5 %": low,
            "median": median,
            "97.5 %": high,
            "worst": errors.worst(),
            "exact": errors.is_exact(),
        },
        "worst_over_u": tally.worst,
        "refusals": tally.refused,
        "doubts": tally.doubts,
        "dominating_terms": tally.dominating,
    })
}

fn figure(value: Option<f64>, interval: Option<Interval>) -> Value {
    json!({ "value": value, "low": interval.map(|(low, _)| low), "high": interval.map(|(_, high)| high) })
}

fn share(count: u64, all: u64) -> Value {
    let (low, high) = share_interval(count, all);
    let share = (all > 0).then(|| count as f64 / all as f64);
    json!({ "count": count, "of": all, "share": share, "low": low, "high": high })
}

fn sides(sides: Sides) -> Value {
    json!({ "over": sides.over, "under": sides.under })
}
