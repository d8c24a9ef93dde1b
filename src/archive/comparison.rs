//! How the results of two runs differ: shifts in Teff, log g and mass, verdicts that changed, and a figure.
//!
//! In: two sets of reports as JSON. Reports are paired by the hash of their input and the object's name, in
//! order. For each quantity: the median shift (new minus old), the scatter as 1.4826 times the median
//! absolute deviation (the sigma of a normal distribution, Huber 1981), and the outliers, which lie
//! further than [`OUTLIER_SCATTERS`] scatters from the median. Out: data; [`render_text`] and
//! [`render_figure`] write it.

use std::collections::BTreeMap;

use serde::Serialize;
use serde_json::Value;

/// Scatters from the median beyond which a shift is an outlier; common practice.
pub const OUTLIER_SCATTERS: f64 = 5.0;

/// Sigma of a normal distribution over its median absolute deviation: 1 / Phi^-1(3/4).
const SIGMA_PER_MAD: f64 = 1.482_602_218_505_602;

/// The quantities compared: name, unit, place in the report, and the least scatter that counts, below
/// which shifts are rounding (a thousandth of a typical error).
const QUANTITIES: [(&str, &str, &str, f64); 3] = [
    ("teff_k", "K", "/parameters/teff_k/value", 0.1),
    ("log_g", "dex", "/parameters/log_g/value", 1e-5),
    ("mass_msun", "Msun", "/star/mass_msun/value", 1e-5),
];

/// Two runs, compared.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Comparison {
    /// Spectra with a report in both runs.
    pub paired: usize,
    /// Objects with a report in the old run only.
    pub only_old: Vec<String>,
    /// Objects with a report in the new run only.
    pub only_new: Vec<String>,
    /// One for each quantity.
    pub shifts: Vec<Shift>,
    /// Objects whose verdict changed: name, old, new.
    pub verdict_changes: Vec<(String, String, String)>,
}

/// How one quantity shifted.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Shift {
    /// Name, with unit suffix.
    pub quantity: &'static str,
    /// Unit.
    pub unit: &'static str,
    /// Spectra that have it in both runs.
    pub count: usize,
    /// Median of new minus old; `None` without spectra.
    pub median: Option<f64>,
    /// Robust scatter of new minus old; `None` without spectra.
    pub scatter: Option<f64>,
    /// Objects far from the median, the farthest first: name, shift.
    pub outliers: Vec<(String, f64)>,
    /// Every spectrum: name, old value, shift.
    pub points: Vec<(String, f64, f64)>,
}

/// Compares two sets of reports.
pub fn compare(old: &[Value], new: &[Value]) -> Comparison {
    let mut old = by_identity(old);
    let mut pairs = Vec::new();
    let mut only_new = Vec::new();
    for (identity, report) in by_identity(new) {
        match old.remove(&identity) {
            Some(before) => pairs.push((before, report)),
            None => only_new.push(name(report)),
        }
    }
    let verdict = |report: &Value| report["verdict"].as_str().unwrap_or("none").to_owned();
    Comparison {
        paired: pairs.len(),
        only_old: old.into_values().map(name).collect(),
        only_new,
        shifts: QUANTITIES.iter().map(|quantity| shift(quantity, &pairs)).collect(),
        verdict_changes: pairs
            .iter()
            .filter(|(old, new)| verdict(old) != verdict(new))
            .map(|(old, new)| (name(new), verdict(old), verdict(new)))
            .collect(),
    }
}

/// (object's name, hash of the input, how many of both came before) identifies a spectrum.
fn by_identity(reports: &[Value]) -> BTreeMap<(String, String, usize), &Value> {
    let mut map = BTreeMap::new();
    for report in reports {
        let source = report["source"]["blake3"].as_str().unwrap_or_default().to_owned();
        let mut identity = (name(report), source, 0);
        while map.contains_key(&identity) {
            identity.2 += 1;
        }
        map.insert(identity, report);
    }
    map
}

fn name(report: &Value) -> String {
    report["object"]["name"].as_str().unwrap_or_default().to_owned()
}

fn shift(
    (quantity, unit, place, least_scatter): &(&'static str, &'static str, &'static str, f64),
    pairs: &[(&Value, &Value)],
) -> Shift {
    let value = |report: &Value| report.pointer(place).and_then(Value::as_f64);
    let points: Vec<(String, f64, f64)> = pairs
        .iter()
        .filter_map(|(old, new)| Some((name(new), value(old)?, value(new)? - value(old)?)))
        .collect();
    let median_shift = median(points.iter().map(|point| point.2));
    let scatter = median_shift
        .and_then(|m| median(points.iter().map(|p| (p.2 - m).abs())))
        .map(|mad| mad * SIGMA_PER_MAD);
    let mut outliers = Vec::new();
    if let (Some(median_shift), Some(scatter)) = (median_shift, scatter) {
        let limit = OUTLIER_SCATTERS * scatter.max(*least_scatter);
        outliers
            .extend(points.iter().filter(|p| (p.2 - median_shift).abs() > limit).map(|p| (p.0.clone(), p.2)));
        outliers.sort_by(|a, b| (b.1 - median_shift).abs().total_cmp(&(a.1 - median_shift).abs()));
    }
    Shift { quantity, unit, count: points.len(), median: median_shift, scatter, outliers, points }
}

fn median(values: impl Iterator<Item = f64>) -> Option<f64> {
    let mut sorted: Vec<f64> = values.collect();
    sorted.sort_by(f64::total_cmp);
    let (lower, upper) = (sorted.len().checked_sub(1)? / 2, sorted.len() / 2);
    Some((sorted[lower] + sorted[upper]) / 2.0)
}

/// The comparison as lines for people.
pub fn render_text(comparison: &Comparison) -> String {
    /// More names than this belong into the JSON.
    const NAMES_TOLD: usize = 20;
    let mut lines = vec![format!(
        "{} spectra in both, {} only in the old run, {} only in the new one",
        comparison.paired,
        comparison.only_old.len(),
        comparison.only_new.len()
    )];
    for shift in &comparison.shifts {
        let Some((median, scatter)) = shift.median.zip(shift.scatter) else {
            lines.push(format!("{:<10} no spectra", shift.quantity));
            continue;
        };
        lines.push(format!(
            "{:<10} median shift {} {}, scatter {} ({} spectra, {} outliers)",
            shift.quantity,
            signed(median),
            shift.unit,
            signed(scatter).trim_start_matches('+'),
            shift.count,
            shift.outliers.len()
        ));
        for (name, value) in shift.outliers.iter().take(NAMES_TOLD) {
            lines.push(format!("  outlier  {name}: {} {}", signed(*value), shift.unit));
        }
    }
    lines.push(format!("{} verdicts changed", comparison.verdict_changes.len()));
    for (name, old, new) in comparison.verdict_changes.iter().take(NAMES_TOLD) {
        lines.push(format!("  {name}: {old} -> {new}"));
    }
    lines.join("\n") + "\n"
}

fn signed(value: f64) -> String {
    if value.abs() >= 10.0 { format!("{value:+.1}") } else { format!("{value:+.5}") }
}

/// One panel of the figure, in pixels of the drawing.
#[derive(Serialize)]
struct Panel {
    title: String,
    top: f64,
    zero_y: f64,
    median_y: f64,
    high_label: String,
    low_label: String,
    left_label: String,
    right_label: String,
    points: Vec<Point>,
}

#[derive(Serialize)]
struct Point {
    x: f64,
    y: f64,
    is_outlier: bool,
    title: String,
}

/// Inner width and height of a panel, and the distance between two, in pixels.
const PANEL: (f64, f64, f64) = (620.0, 150.0, 210.0);

/// The comparison as an SVG figure: shift against old value, a panel for each quantity.
///
/// # Errors
/// The template is broken, which a test would see.
pub fn render_figure(comparison: &Comparison, old: &str, new: &str) -> Result<String, minijinja::Error> {
    let mut environment = minijinja::Environment::new();
    environment.set_auto_escape_callback(|_| minijinja::AutoEscape::Html);
    environment.add_template("figure", include_str!("comparison.svg"))?;
    let panels: Vec<Panel> =
        comparison.shifts.iter().enumerate().map(|(index, shift)| panel(shift, index)).collect();
    let height = 60.0 + PANEL.2 * panels.len() as f64;
    environment.get_template("figure")?.render(minijinja::context! {
        panels => minijinja::Value::from(minijinja::value::Serde(&panels)), old, new, height, width => PANEL.0, panel_height => PANEL.1, paired => comparison.paired,
    })
}

fn panel(shift: &Shift, index: usize) -> Panel {
    let (width, height, pitch) = PANEL;
    let fold = |values: &dyn Fn(&(String, f64, f64)) -> f64, start: f64, pick: fn(f64, f64) -> f64| {
        shift.points.iter().map(values).fold(start, pick)
    };
    let left = fold(&|p| p.1, f64::INFINITY, f64::min);
    let right = fold(&|p| p.1, f64::NEG_INFINITY, f64::max);
    let reach = fold(&|p| p.2.abs(), 0.0, f64::max);
    let span = if right > left { right - left } else { 1.0 };
    let reach = if reach > 0.0 { reach } else { 1.0 };
    let rounded = |pixels: f64| (pixels * 10.0).round() / 10.0;
    let y = |value: f64| rounded(height * (0.5 - 0.45 * value / reach));
    Panel {
        title: format!("shift of {} [{}]", shift.quantity, shift.unit),
        top: 40.0 + pitch * index as f64,
        zero_y: y(0.0),
        median_y: y(shift.median.unwrap_or(0.0)),
        high_label: signed(reach / 0.9),
        low_label: signed(-reach / 0.9),
        left_label: if left.is_finite() { format!("{left:.5}") } else { String::new() },
        right_label: if right.is_finite() { format!("{right:.5}") } else { String::new() },
        points: shift
            .points
            .iter()
            .map(|(name, old, value)| Point {
                x: rounded(width * (0.02 + 0.96 * (old - left) / span)),
                y: y(*value),
                is_outlier: shift.outliers.iter().any(|outlier| outlier.0 == *name && outlier.1 == *value),
                title: format!("{name}: {}", signed(*value)),
            })
            .collect(),
    }
}
