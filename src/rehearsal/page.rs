//! The page of a rehearsal: one HTML file with its figures inside, nothing fetched from anywhere.
//!
//! Figures: fitted against true values, pulls against the unit Gaussian, verdicts by brightness
//! (completeness) and by kind of object (purity), and the time that each object took.

use std::collections::BTreeMap;

use minijinja::value::Serde;
use minijinja::{AutoEscape, Environment, context};
use serde::Serialize;

use super::night::{Sighting, Truth};
use super::score::{Comparison, Summary};
use crate::report::{Report, Verdict};

/// Plot area of a figure, pixels of the drawing: left, right, top, bottom.
const LEFT: f64 = 70.0;
const RIGHT: f64 = 460.0;
const TOP: f64 = 30.0;
const BOTTOM: f64 = 270.0;

/// Temperatures with a tick, K.
const TEFF_TICKS_K: [f64; 6] = [6000.0, 10_000.0, 15_000.0, 25_000.0, 40_000.0, 60_000.0];
/// Ends of the bins of brightness, signal-to-noise ratio per pixel.
const SNR_BINS: [f64; 6] = [0.0, 15.0, 25.0, 40.0, 70.0, f64::INFINITY];
/// Bins of the histograms of pulls, and how far they reach.
const PULL_BINS: usize = 28;
const PULL_REACH: f64 = 3.5;
/// Bins of the histogram of times.
const TIME_BINS: usize = 30;

/// A figure: axes, and what is drawn in them, in pixels.
#[derive(Debug, Default, Serialize)]
struct Figure {
    title: String,
    x_label: String,
    y_label: String,
    x_ticks: Vec<(f64, String)>,
    y_ticks: Vec<(f64, String)>,
    points: Vec<Point>,
    bars: Vec<Bar>,
    lines: Vec<String>,
    legend: Vec<(String, String)>,
}

#[derive(Debug, Serialize)]
struct Point {
    x: f64,
    y: f64,
    class: &'static str,
    title: String,
}

#[derive(Debug, Serialize)]
struct Bar {
    x: f64,
    y: f64,
    width: f64,
    height: f64,
    class: &'static str,
    title: String,
}

/// One kind of object and how many got which verdict.
#[derive(Debug, Serialize)]
struct KindRow {
    kind: String,
    count: usize,
    accepted: usize,
    review: usize,
    rejected: usize,
}

/// From data to pixels along one axis.
#[derive(Debug, Clone, Copy)]
struct Axis {
    range: (f64, f64),
    pixels: (f64, f64),
    is_log: bool,
}

impl Axis {
    fn horizontal(range: (f64, f64)) -> Self {
        Axis { range, pixels: (LEFT, RIGHT), is_log: false }
    }

    fn vertical(range: (f64, f64)) -> Self {
        Axis { range, pixels: (BOTTOM, TOP), is_log: false }
    }

    fn log(self) -> Self {
        Axis { is_log: true, ..self }
    }

    /// Values outside the range are drawn on its edge.
    fn place(&self, value: f64) -> f64 {
        let scaled = |value: f64| if self.is_log { value.ln() } else { value };
        let share = (scaled(value) - scaled(self.range.0)) / (scaled(self.range.1) - scaled(self.range.0));
        let pixel = self.pixels.0 + share.clamp(0.0, 1.0) * (self.pixels.1 - self.pixels.0);
        (pixel * 10.0).round() / 10.0
    }

    fn ticks(&self, values: &[f64], words: impl Fn(f64) -> String) -> Vec<(f64, String)> {
        let is_inside = |value: &&f64| (self.range.0..=self.range.1).contains(*value);
        values.iter().filter(is_inside).map(|value| (self.place(*value), words(*value))).collect()
    }
}

/// The page as HTML.
///
/// # Errors
/// The template is broken, which a test would see.
pub fn page(seed: u64, night: &[(Sighting, Report)], summary: &Summary) -> Result<String, minijinja::Error> {
    let compared: Vec<(&Sighting, Comparison)> = night
        .iter()
        .filter_map(|(sighting, report)| Some((sighting, Comparison::new(sighting, report)?)))
        .collect();
    let mut figures = vec![recovery(&compared)];
    figures.extend((0..3).map(|parameter| residuals(&compared, parameter)));
    figures.extend((0..3).map(|parameter| pulls(&compared, parameter)));
    figures.push(verdicts_by_snr(night));
    figures.push(times(night));
    let mut environment = Environment::new();
    environment.set_auto_escape_callback(|_| AutoEscape::Html);
    environment.add_template("page", include_str!("page.html.j2"))?;
    environment.get_template("page")?.render(context! {
        seed,
        version => env!("CARGO_PKG_VERSION"),
        left => LEFT, right => RIGHT, top => TOP, bottom => BOTTOM,
        figures => minijinja::Value::from(Serde(&figures)),
        kinds => minijinja::Value::from(Serde(kinds(night))),
        summary => minijinja::Value::from(Serde(summary)),
    })
}

fn class(comparison: &Comparison) -> &'static str {
    if comparison.is_wrong {
        "wrong"
    } else if comparison.is_accepted {
        "accepted"
    } else {
        "review"
    }
}

fn point_legend() -> Vec<(String, String)> {
    [("accepted", "accepted"), ("review", "not accepted"), ("wrong", "wrong solution")]
        .map(|(class, words)| (class.to_owned(), words.to_owned()))
        .into()
}

fn thousands(teff_k: f64) -> String {
    format!("{:.0} 000", teff_k / 1000.0)
}

fn teff_axis() -> (f64, f64) {
    (TEFF_TICKS_K[0], 80_000.0)
}

/// Fitted against true temperature.
fn recovery(compared: &[(&Sighting, Comparison)]) -> Figure {
    let (x, y) = (Axis::horizontal(teff_axis()).log(), Axis::vertical(teff_axis()).log());
    let ends = teff_axis();
    Figure {
        title: "Effective temperature".to_owned(),
        x_label: "true, K".to_owned(),
        y_label: "fitted, K".to_owned(),
        x_ticks: x.ticks(&TEFF_TICKS_K, thousands),
        y_ticks: y.ticks(&TEFF_TICKS_K, thousands),
        points: compared
            .iter()
            .map(|(sighting, c)| Point {
                x: x.place(c.teff_k),
                y: y.place(c.teff_k + c.difference[0]),
                class: class(c),
                title: format!(
                    "{}: {:.0} K, true {:.0} K",
                    sighting.name,
                    c.teff_k + c.difference[0],
                    c.teff_k
                ),
            })
            .collect(),
        lines: vec![format!(
            "M{} {}L{} {}",
            x.place(ends.0),
            y.place(ends.0),
            x.place(ends.1),
            y.place(ends.1)
        )],
        legend: point_legend(),
        ..Figure::default()
    }
}

/// Fitted minus true against true temperature.
fn residuals(compared: &[(&Sighting, Comparison)], parameter: usize) -> Figure {
    let (title, y_label, reach, ticks) = [
        ("Error of Teff", "fitted - true, %", 10.0, [-10.0, -5.0, 0.0, 5.0, 10.0]),
        ("Error of log g", "fitted - true, dex", 0.4, [-0.4, -0.2, 0.0, 0.2, 0.4]),
        ("Error of the radial velocity", "fitted - true, km/s", 60.0, [-60.0, -30.0, 0.0, 30.0, 60.0]),
    ][parameter];
    let (x, y) = (Axis::horizontal(teff_axis()).log(), Axis::vertical((-reach, reach)));
    let error = |c: &Comparison| match parameter {
        0 => 100.0 * c.difference[0] / c.teff_k,
        _ => c.difference[parameter],
    };
    Figure {
        title: title.to_owned(),
        x_label: "true Teff, K (values beyond the frame are drawn on its edge)".to_owned(),
        y_label: y_label.to_owned(),
        x_ticks: x.ticks(&TEFF_TICKS_K, thousands),
        y_ticks: y.ticks(&ticks, |value| value.to_string()),
        points: compared
            .iter()
            .map(|(sighting, c)| Point {
                x: x.place(c.teff_k),
                y: y.place(error(c)),
                class: class(c),
                title: format!("{}: {:+.3} at S/N {:.0}", sighting.name, error(c), sighting.snr),
            })
            .collect(),
        lines: vec![format!("M{LEFT} {0}L{RIGHT} {0}", y.place(0.0))],
        legend: point_legend(),
        ..Figure::default()
    }
}

/// Histogram of (fitted - true) / statistical error, with the unit Gaussian of as many stars.
fn pulls(compared: &[(&Sighting, Comparison)], parameter: usize) -> Figure {
    let name = ["Teff", "log g", "the radial velocity"][parameter];
    let values: Vec<f64> =
        compared.iter().filter(|(_, c)| !c.is_wrong).map(|(_, c)| c.pull(parameter)).collect();
    let width = 2.0 * PULL_REACH / PULL_BINS as f64;
    let gaussian = |x: f64| {
        let density = (-0.5 * x * x).exp() / (2.0 * std::f64::consts::PI).sqrt();
        density * width * values.len() as f64
    };
    let mut figure = histogram(&values, (-PULL_REACH, PULL_REACH), PULL_BINS, gaussian(0.0));
    let x = Axis::horizontal((-PULL_REACH, PULL_REACH));
    let y = Axis::vertical((0.0, figure.1));
    let curve = (0..=70).map(|i| -PULL_REACH + 0.1 * f64::from(i));
    let path: Vec<String> = curve.map(|at| format!("{} {}", x.place(at), y.place(gaussian(at)))).collect();
    figure.0.lines.push(format!("M{}", path.join("L")));
    figure.0.title = format!("Pulls of {name}");
    figure.0.x_label = "(fitted - true) / statistical error; the curve is the unit Gaussian".to_owned();
    figure.0.x_ticks = x.ticks(&[-3.0, -2.0, -1.0, 0.0, 1.0, 2.0, 3.0], |value| value.to_string());
    figure.0
}

/// Bars, and the top of the vertical axis.
fn histogram(values: &[f64], range: (f64, f64), bins: usize, least_top: f64) -> (Figure, f64) {
    let width = (range.1 - range.0) / bins as f64;
    let mut counts = vec![0_usize; bins];
    for value in values.iter().filter(|value| value.is_finite()) {
        let bin = ((value - range.0) / width).floor().clamp(0.0, (bins - 1) as f64);
        counts[bin as usize] += 1;
    }
    let top = 1.1 * counts.iter().copied().max().unwrap_or(0).max(1) as f64;
    let top = top.max(1.1 * least_top);
    let (x, y) = (Axis::horizontal(range), Axis::vertical((0.0, top)));
    let bars = counts.iter().enumerate().map(|(bin, count)| {
        let (from, to) = (range.0 + width * bin as f64, range.0 + width * (bin + 1) as f64);
        let (left, right, upper) = (x.place(from), x.place(to), y.place(*count as f64));
        let title = format!("{count} from {from:.2} to {to:.2}");
        Bar { x: left, y: upper, width: right - left, height: BOTTOM - upper, class: "plain", title }
    });
    let step = 10f64.powf((top / 2.0).log10().floor()).max(1.0);
    let tick_values: Vec<f64> = (0..=20).map(|i| step * f64::from(i)).filter(|tick| *tick <= top).collect();
    let every = tick_values.len().div_ceil(6);
    let ticks: Vec<f64> = tick_values.into_iter().step_by(every).collect();
    let figure = Figure {
        y_label: "objects".to_owned(),
        y_ticks: y.ticks(&ticks, |value| value.to_string()),
        bars: bars.collect(),
        ..Figure::default()
    };
    (figure, top)
}

/// Share of the white dwarfs with each verdict, by brightness.
fn verdicts_by_snr(night: &[(Sighting, Report)]) -> Figure {
    let y = Axis::vertical((0.0, 100.0));
    let bins = SNR_BINS.len() - 1;
    let width = (RIGHT - LEFT) / bins as f64;
    let mut figure = Figure {
        title: "Completeness: verdicts on white dwarfs".to_owned(),
        x_label: "S/N per pixel (number of stars)".to_owned(),
        y_label: "share, %".to_owned(),
        y_ticks: y.ticks(&[0.0, 25.0, 50.0, 75.0, 100.0], |value| value.to_string()),
        legend: [("accepted", "accepted"), ("review", "review"), ("wrong", "rejected")]
            .map(|(class, words)| (class.to_owned(), words.to_owned()))
            .into(),
        ..Figure::default()
    };
    for (bin, ends) in SNR_BINS.windows(2).enumerate() {
        let inside: Vec<&Report> = night
            .iter()
            .filter(|(sighting, _)| is_da(sighting) && (ends[0]..ends[1]).contains(&sighting.snr))
            .map(|(_, report)| report)
            .collect();
        let left = LEFT + width * bin as f64;
        let range =
            if ends[1].is_finite() { format!("{}-{}", ends[0], ends[1]) } else { format!("> {}", ends[0]) };
        figure.x_ticks.push((left + 0.5 * width, format!("{range} ({})", inside.len())));
        let mut below = 0.0;
        for (verdict, class) in
            [(Verdict::Accepted, "accepted"), (Verdict::Review, "review"), (Verdict::Rejected, "wrong")]
        {
            let count = inside.iter().filter(|report| report.verdict == verdict).count();
            let share = 100.0 * count as f64 / inside.len().max(1) as f64;
            let (lower, upper) = (y.place(below), y.place(below + share));
            figure.bars.push(Bar {
                x: left + 0.15 * width,
                y: upper,
                width: 0.7 * width,
                height: lower - upper,
                class,
                title: format!("{count} of {}: {share:.1} %", inside.len()),
            });
            below += share;
        }
    }
    figure
}

/// Histogram of the time spent on each object.
fn times(night: &[(Sighting, Report)]) -> Figure {
    let mut values: Vec<f64> = night.iter().map(|(_, report)| report.timing_ms.values().sum()).collect();
    values.sort_by(f64::total_cmp);
    let quantile = |share: f64| {
        let at = (share * values.len().saturating_sub(1) as f64) as usize;
        values.get(at).copied().unwrap_or(0.0)
    };
    let (median, most) = (quantile(0.5), quantile(0.99));
    // Rounded up to a whole step, so that the ticks are round numbers.
    let step = 10f64.powf((1.2 * most.max(1.0)).log10().floor());
    let last = step * (1.2 * most.max(1.0) / step).ceil();
    let (mut figure, _) = histogram(&values, (0.0, last), TIME_BINS, 0.0);
    let ticks: Vec<f64> = (0..=5).map(|i| last * f64::from(i) / 5.0).collect();
    figure.title = "Time per object".to_owned();
    figure.x_label = format!("reading and fitting, ms (median {median:.0}, 99 % below {most:.0})");
    figure.x_ticks = Axis::horizontal((0.0, last)).ticks(&ticks, |value| format!("{value:.0}"));
    figure
}

fn is_da(sighting: &Sighting) -> bool {
    matches!(sighting.truth, Truth::Da { .. })
}

/// Verdicts by kind of object, white dwarfs first.
fn kinds(night: &[(Sighting, Report)]) -> Vec<KindRow> {
    let mut rows: BTreeMap<(bool, String), KindRow> = BTreeMap::new();
    for (sighting, report) in night {
        let kind = kind_words(&sighting.truth);
        let row = rows.entry((!is_da(sighting), kind.clone())).or_insert_with(|| KindRow {
            kind,
            count: 0,
            accepted: 0,
            review: 0,
            rejected: 0,
        });
        row.count += 1;
        match report.verdict {
            Verdict::Accepted => row.accepted += 1,
            Verdict::Review => row.review += 1,
            Verdict::Rejected => row.rejected += 1,
        }
    }
    rows.into_values().collect()
}

/// The name of the variant in words: `NarrowLined` is "narrow lined".
fn kind_words(truth: &Truth) -> String {
    if matches!(truth, Truth::Da { .. }) {
        return "DA white dwarf".to_owned();
    }
    let name: String = format!("{truth:?}").chars().take_while(|c| c.is_alphanumeric()).collect();
    let mut words = String::new();
    for character in name.chars() {
        if character.is_uppercase() && !words.is_empty() {
            words.push(' ');
        }
        words.extend(character.to_lowercase());
    }
    words
}
