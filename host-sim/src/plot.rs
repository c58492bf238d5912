//! Figures. The one place that knows the plotting library.
//!
//! Points with their 95 % limits as bars, joined by thin lines; colours that colour-blind people tell apart, and a
//! marker of its own for each curve, so that a grey print tells them apart too.

mod axis;

use crate::campaign::summary::{Summary, Tally};
use crate::statistics::share_interval;
use axis::Axis;
use kuva::backend::svg::SvgBackend;
use kuva::plot::legend::{LegendEntry, LegendShape};
use kuva::plot::scatter::MarkerShape;
use kuva::plot::{LinePlot, ScatterPlot};
use kuva::render::annotations::ReferenceLine;
use kuva::render::figure::Figure;
use kuva::render::layout::{Layout, TickFormat};
use kuva::render::plots::Plot;
use kuva::render::render::Scene;
use std::sync::Arc;

/// Colours of Okabe and Ito (2008), but for their yellow, which is too light for lines; a marker beside each.
const STYLES: [(&str, MarkerShape); 7] = [
    ("#0072B2", MarkerShape::Circle),
    ("#D55E00", MarkerShape::Square),
    ("#009E73", MarkerShape::Triangle),
    ("#CC79A7", MarkerShape::Diamond),
    ("#E69F00", MarkerShape::TriangleDown),
    ("#56B4E9", MarkerShape::Pentagon),
    ("#000000", MarkerShape::Star),
];
/// More curves than this cannot be told apart in one panel.
const MOST_CURVES: usize = STYLES.len();
/// Distance of neighbouring curves' bars, as a share of the axis.
const ASIDE: f64 = 0.008;
/// Share inside the expanded uncertainty that k = 2 promises.
const PROMISED: f64 = 95.45;

/// A figure that can be written.
pub struct Picture {
    /// Name of its file, without the extension.
    pub name: String,
    scene: Scene,
}

impl Picture {
    /// As SVG.
    #[must_use]
    pub fn svg(&self) -> String {
        SvgBackend::default().render_scene(&self.scene)
    }

    /// As PNG, twice as many pixels as the SVG has units.
    ///
    /// # Errors
    /// The plotting library's.
    #[cfg(feature = "png")]
    pub fn png(&self) -> Result<Vec<u8>, String> {
        kuva::backend::png::PngBackend::new()
            .with_scale(2.0)
            .render_scene(&self.scene)
    }
}

/// A value with its limits.
type Figures = (f64, f64, f64);

/// One quantity over the axis.
struct Panel {
    title: &'static str,
    value: fn(&Tally) -> Option<Figures>,
    /// Drawn over a logarithmic axis where it spans more than a decade.
    logarithmic: bool,
    /// Where it should be.
    promised: Option<f64>,
}

/// A curve with its 95 % limits: place on the axis, value, limits.
struct Curve {
    name: String,
    points: Vec<(f64, Figures)>,
}

fn share(count: u64, all: u64) -> Option<Figures> {
    let (low, high) = share_interval(count, all);
    (all > 0).then(|| (100.0 * count as f64 / all as f64, 100.0 * low, 100.0 * high))
}

const ERRORS: [Panel; 3] = [
    Panel {
        title: "bias in µm",
        value: |tally| {
            let (low, high) = tally.errors.mean_interval()?;
            Some((tally.errors.mean()?, low, high))
        },
        logarithmic: false,
        promised: Some(0.0),
    },
    Panel {
        title: "spread in µm",
        value: |tally| {
            let (low, high) = tally.errors.deviation_interval()?;
            Some((tally.errors.deviation()?, low, high))
        },
        logarithmic: true,
        promised: None,
    },
    Panel {
        title: "inside the stated uncertainty in %",
        value: |tally| share(tally.inside, tally.undoubted),
        logarithmic: false,
        promised: Some(PROMISED),
    },
];

const RATES: [Panel; 3] = [
    Panel {
        title: "grossly wrong without a doubt in %",
        value: |tally| share(tally.confidently_wrong(), tally.runs),
        logarithmic: false,
        promised: Some(0.0),
    },
    Panel {
        title: "doubted in %",
        value: |tally| share(tally.doubted, tally.runs),
        logarithmic: false,
        promised: None,
    },
    Panel {
        title: "refused in %",
        value: |tally| share(tally.all_refused(), tally.runs),
        logarithmic: false,
        promised: None,
    },
];

/// The figures of a campaign: errors and rates over the axis with most values, a curve for each combination of the
/// others; more than one figure where there are many curves, none if the campaign has a single cell.
#[must_use]
pub fn of_campaign(summary: &Summary) -> Vec<Picture> {
    let Some(axis) = Axis::of(summary) else {
        return Vec::new();
    };
    let names = curve_names(summary, &axis);
    let count = names.len().div_ceil(MOST_CURVES);
    let mut pictures = Vec::new();
    for (part, names) in names.chunks(MOST_CURVES).enumerate() {
        for (name, panels) in [("errors", &ERRORS), ("rates", &RATES)] {
            let name = if count > 1 {
                format!("{name}-{}", part + 1)
            } else {
                name.to_string()
            };
            let scene = figure(summary, &axis, names, panels);
            pictures.push(Picture { name, scene });
        }
    }
    pictures
}

/// The values of all axes but one.
fn others(labels: &[String], axis: &Axis) -> String {
    let others: Vec<&str> = labels
        .iter()
        .enumerate()
        .filter(|(number, _)| *number != axis.number)
        .map(|(_, label)| label.strip_suffix(".0").unwrap_or(label))
        .collect();
    others.join(", ")
}

fn curve_names(summary: &Summary, axis: &Axis) -> Vec<String> {
    let mut names: Vec<String> = Vec::new();
    for labels in &summary.labels {
        let name = others(labels, axis);
        if !names.contains(&name) {
            names.push(name);
        }
    }
    names
}

/// The curves of these names.
fn curves(summary: &Summary, axis: &Axis, names: &[String], value: fn(&Tally) -> Option<Figures>) -> Vec<Curve> {
    let mut curves: Vec<Curve> = names
        .iter()
        .map(|name| Curve {
            name: name.clone(),
            points: Vec::new(),
        })
        .collect();
    for (cell, (labels, tally)) in summary.labels.iter().zip(&summary.cells).enumerate() {
        let name = others(labels, axis);
        let curve = curves.iter_mut().find(|curve| curve.name == name);
        if let (Some(curve), Some(x), Some(figures)) = (curve, axis.place(cell), value(tally)) {
            let (y, low, high) = figures;
            if y.is_finite() && low.is_finite() && high.is_finite() {
                curve.points.push((x, figures));
            }
        }
    }
    curves
}

fn figure(summary: &Summary, axis: &Axis, names: &[String], panels: &[Panel]) -> Scene {
    let mut all = Vec::new();
    let mut layouts = Vec::new();
    for panel in panels {
        let curves = curves(summary, axis, names, panel.value);
        all.push(plots(axis, &curves, panel));
        layouts.push(layout(axis, &curves, panel, all.last().map(Vec::as_slice)));
    }
    let figure = Figure::new(1, panels.len())
        .with_plots(all)
        .with_layouts(layouts)
        .with_title(&summary.title)
        .with_title_size(16)
        .with_cell_size(400.0, 330.0)
        .with_labels();
    let legend = legend(summary, axis, names);
    if legend.is_empty() {
        return figure.render();
    }
    figure.with_shared_legend().with_shared_legend_entries(legend).render()
}

/// A title, then an entry for each curve; empty where there is one curve.
fn legend(summary: &Summary, axis: &Axis, names: &[String]) -> Vec<LegendEntry> {
    let axes: Vec<String> = summary
        .axes
        .iter()
        .enumerate()
        .filter(|(number, _)| *number != axis.number)
        .map(|(_, name)| axis::label(name))
        .collect();
    if axes.is_empty() {
        return Vec::new();
    }
    let entry = |label: String, color: &str, shape| LegendEntry {
        label,
        color: color.to_string(),
        shape,
        dasharray: None,
    };
    let title = entry(axes.join(", "), "none", LegendShape::Rect);
    let entries = names
        .iter()
        .zip(STYLES)
        .map(|(name, (color, marker))| entry(name.clone(), color, LegendShape::Marker(marker)));
    std::iter::once(title).chain(entries).collect()
}

fn plots(axis: &Axis, curves: &[Curve], panel: &Panel) -> Vec<Plot> {
    let mut plots = Vec::new();
    let middle = (curves.len() as f64 - 1.0) / 2.0;
    for (number, (curve, (colour, marker))) in curves.iter().zip(STYLES).enumerate() {
        if curve.points.is_empty() {
            continue;
        }
        let aside = ASIDE * (number as f64 - middle);
        let place = |x: f64| axis.aside(x, aside);
        let points = || curve.points.iter().map(|(x, (y, ..))| (place(*x), *y));
        let line = LinePlot::new().with_data(points()).with_color(colour);
        plots.push(Plot::Line(line.with_stroke_width(1.0)));
        let bars = curve.points.iter().map(|(_, (y, low, high))| (y - low, high - y));
        let scatter = ScatterPlot::new()
            .with_data(points())
            .with_y_err_asymmetric(bars)
            .with_color(colour)
            .with_marker(marker)
            .with_size(4.0);
        plots.push(Plot::Scatter(scatter));
    }
    if plots.is_empty() {
        // A panel of nothing still has its axes.
        let (from, to) = axis.ends();
        let y = panel.promised.unwrap_or(1.0);
        let nothing = LinePlot::new().with_data([(from, y), (to, y)]).with_color("none");
        plots.push(Plot::Line(nothing));
    }
    plots
}

fn layout(axis: &Axis, curves: &[Curve], panel: &Panel, plots: Option<&[Plot]>) -> Layout {
    let mut layout = Layout::auto_from_plots(plots.unwrap_or_default())
        .with_x_label(&axis.label)
        .with_y_label(panel.title)
        .with_tick_size(11);
    if let Some(names) = &axis.names {
        let (from, to) = axis.ends();
        layout = layout
            .with_x_categories(names.clone())
            .with_x_axis_min(from - 0.5)
            .with_x_axis_max(to + 0.5);
    } else if axis.logarithmic {
        layout = layout
            .with_log_x()
            .with_x_tick_format(TickFormat::Custom(Arc::new(plain)));
    }
    let values = || {
        curves
            .iter()
            .flat_map(|curve| curve.points.iter().map(|(_, (y, ..))| *y))
    };
    let (least, most) = (values().fold(f64::INFINITY, f64::min), values().fold(0.0, f64::max));
    if panel.logarithmic && least > 0.0 && most > 10.0 * least {
        layout = layout
            .with_log_y()
            .with_y_tick_format(TickFormat::Custom(Arc::new(plain)));
    }
    match panel.promised {
        None => layout,
        Some(value) => layout.with_reference_line(ReferenceLine::horizontal(value).with_color("#666666")),
    }
}

/// A number of an axis without a power of ten.
fn plain(value: f64) -> String {
    format!("{value:.2e}").parse::<f64>().unwrap_or(value).to_string()
}
