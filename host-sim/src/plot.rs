//! Figures as SVG. The one place that knows the plotting library.

use crate::campaign::summary::{Summary, Tally};
use crate::statistics::share_interval;
use kuva::backend::svg::SvgBackend;
use kuva::plot::{BandPlot, LinePlot};
use kuva::render::figure::Figure;
use kuva::render::layout::Layout;
use kuva::render::plots::Plot;

/// Colours that colour-blind people tell apart (Okabe and Ito 2008).
const COLOURS: [&str; 7] = [
    "#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000",
];
/// More curves than this cannot be told apart in one panel.
const MOST_CURVES: usize = COLOURS.len();

/// A curve with its 95 % limits.
struct Curve {
    name: String,
    points: Vec<(f64, f64, f64, f64)>,
}

/// The figures of a campaign with their file names: errors and rates over the first axis of numbers; none if
/// there is no such axis.
#[must_use]
pub fn of_campaign(summary: &Summary) -> Vec<(String, String)> {
    let numeric = |axis: &usize| {
        let column: Vec<Option<f64>> = summary
            .values
            .iter()
            .map(|values| values.get(*axis).copied().flatten())
            .collect();
        column.iter().all(Option::is_some) && column.first() != column.last()
    };
    let Some(axis) = (0..summary.axes.len()).find(numeric) else {
        return Vec::new();
    };
    let name = summary.axes.get(axis).map_or("", String::as_str);
    let label = name.rsplit('.').next().unwrap_or(name).replace('_', " ");
    type Value = fn(&Tally) -> Option<(f64, f64, f64)>;
    fn share(count: u64, all: u64) -> Option<(f64, f64, f64)> {
        let (low, high) = share_interval(count, all);
        (all > 0).then(|| (100.0 * count as f64 / all as f64, 100.0 * low, 100.0 * high))
    }
    let errors: [(&str, Value); 3] = [
        ("bias in µm", |tally| {
            let (low, high) = tally.errors.mean_interval()?;
            Some((tally.errors.mean()?, low, high))
        }),
        ("spread in µm", |tally| {
            let (low, high) = tally.errors.deviation_interval()?;
            Some((tally.errors.deviation()?, low, high))
        }),
        ("inside the stated uncertainty, %", |tally| {
            share(tally.inside, tally.undoubted)
        }),
    ];
    let rates: [(&str, Value); 3] = [
        ("grossly wrong without a doubt, %", |tally| {
            share(tally.confidently_wrong(), tally.runs)
        }),
        ("doubted, %", |tally| share(tally.doubted, tally.runs)),
        ("refused, %", |tally| share(tally.all_refused(), tally.runs)),
    ];
    let logarithmic = is_logarithmic(summary, axis);
    [("errors.svg", errors), ("rates.svg", rates)]
        .into_iter()
        .map(|(file, panels)| {
            let panels: Vec<(&str, Vec<Curve>)> = panels
                .into_iter()
                .map(|(title, value)| (title, curves(summary, axis, value)))
                .collect();
            (file.to_string(), figure(&summary.title, &label, logarithmic, &panels))
        })
        .collect()
}

/// Do the axis's values grow by ratios rather than by steps?
fn is_logarithmic(summary: &Summary, axis: usize) -> bool {
    let mut values: Vec<f64> = summary
        .values
        .iter()
        .filter_map(|values| values.get(axis).copied().flatten())
        .collect();
    values.sort_by(f64::total_cmp);
    values.dedup();
    match (values.first(), values.last()) {
        (Some(first), Some(last)) => *first > 0.0 && *last >= 8.0 * first,
        _ => false,
    }
}

/// One curve for each combination of the other axes.
fn curves(summary: &Summary, axis: usize, value: fn(&Tally) -> Option<(f64, f64, f64)>) -> Vec<Curve> {
    let mut curves: Vec<Curve> = Vec::new();
    for ((labels, values), tally) in summary.labels.iter().zip(&summary.values).zip(&summary.cells) {
        let others: Vec<&str> = labels
            .iter()
            .enumerate()
            .filter(|(number, _)| *number != axis)
            .map(|(_, label)| label.as_str())
            .collect();
        let name = others.join(", ");
        let (Some(x), Some((y, low, high))) = (values.get(axis).copied().flatten(), value(tally)) else {
            continue;
        };
        if !(y.is_finite() && low.is_finite() && high.is_finite()) {
            continue;
        }
        match curves.iter_mut().find(|curve| curve.name == name) {
            Some(curve) => curve.points.push((x, y, low, high)),
            None => curves.push(Curve {
                name,
                points: vec![(x, y, low, high)],
            }),
        }
    }
    curves.truncate(MOST_CURVES);
    curves
}

fn figure(title: &str, label: &str, logarithmic: bool, panels: &[(&str, Vec<Curve>)]) -> String {
    let mut all = Vec::new();
    let mut layouts = Vec::new();
    for (number, (name, curves)) in panels.iter().enumerate() {
        let mut plots = Vec::new();
        for (curve, colour) in curves.iter().zip(COLOURS) {
            let column = |pick: fn(&(f64, f64, f64, f64)) -> f64| curve.points.iter().map(pick).collect::<Vec<f64>>();
            let band = BandPlot::new(column(|p| p.0), column(|p| p.2), column(|p| p.3));
            plots.push(Plot::Band(band.with_color(colour).with_opacity(0.18)));
            let mut line = LinePlot::new()
                .with_data(curve.points.iter().map(|p| (p.0, p.1)))
                .with_color(colour);
            // Once is enough for all panels.
            if number == 0 && !curve.name.is_empty() {
                line = line.with_legend(curve.name.clone());
            }
            plots.push(Plot::Line(line));
        }
        if plots.is_empty() {
            // A panel of nothing still has its axes.
            plots.push(Plot::Line(
                LinePlot::new()
                    .with_data([(0.0, 0.0), (1.0, 0.0)])
                    .with_color(COLOURS[6]),
            ));
        }
        let mut layout = Layout::auto_from_plots(&plots).with_x_label(label).with_y_label(*name);
        if logarithmic {
            layout = layout.with_log_x();
        }
        all.push(plots);
        layouts.push(layout);
    }
    let figure = Figure::new(1, panels.len())
        .with_plots(all)
        .with_layouts(layouts)
        .with_title(title)
        .with_cell_size(430.0, 330.0)
        .with_shared_legend_bottom()
        .with_labels();
    SvgBackend.render_scene(&figure.render())
}
