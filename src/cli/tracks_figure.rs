//! The mass-radius relation as a figure (SVG): theory, and stars whose masses and radii do not rest on it.

use minijinja::value::Serde;
use minijinja::{Environment, context};
use serde::Serialize;
use thiserror::Error;

use crate::grid::track_table::TrackTable;
use crate::interior::cold::{ColdPressure, Gravity, cold_star};
use crate::interior::core::Core;
use crate::interior::structure::HydrogenLayer;

/// Why there is no figure.
#[derive(Debug, Error)]
#[error("cannot fill the template of the figure")]
pub struct FigureError(#[from] minijinja::Error);

/// Plot area in pixels and its data limits.
const LEFT: f64 = 70.0;
const RIGHT: f64 = 690.0;
const TOP: f64 = 50.0;
const BOTTOM: f64 = 450.0;
const MASS_MSUN: (f64, f64) = (0.1, 1.5);
const RADIUS_RSUN: (f64, f64) = (0.0, 0.03);
const TEFFS_K: [f64; 4] = [5000.0, 10_000.0, 20_000.0, 40_000.0];
const COLOURS: [&str; 4] = ["#b5482a", "#d99a2b", "#3a7d6e", "#2f5d9b"];

/// A star with mass from an orbit and radius from flux and parallax.
struct Known {
    name: &'static str,
    mass_msun: (f64, f64),
    radius_rsun: (f64, f64),
}

/// 40 Eri B: Bond, Bergeron & Bedard 2017; Sirius B: Bond et al. 2017.
const KNOWN: [Known; 2] = [
    Known { name: "40 Eri B", mass_msun: (0.573, 0.018), radius_rsun: (0.013_08, 0.000_20) },
    Known { name: "Sirius B", mass_msun: (1.018, 0.011), radius_rsun: (0.008_10, 0.000_05) },
];

#[derive(Serialize)]
struct Curve {
    label: String,
    colour: &'static str,
    dash: &'static str,
    path: String,
}

#[derive(Serialize)]
struct Mark {
    name: &'static str,
    x: f64,
    y: f64,
    x_low: f64,
    x_high: f64,
    y_low: f64,
    y_high: f64,
}

#[derive(Serialize)]
struct Tick {
    at: f64,
    label: String,
}

fn x_of(mass_msun: f64) -> f64 {
    LEFT + (RIGHT - LEFT) * (mass_msun - MASS_MSUN.0) / (MASS_MSUN.1 - MASS_MSUN.0)
}

fn y_of(radius_rsun: f64) -> f64 {
    BOTTOM - (BOTTOM - TOP) * (radius_rsun - RADIUS_RSUN.0) / (RADIUS_RSUN.1 - RADIUS_RSUN.0)
}

fn curve(
    label: &str,
    colour: &'static str,
    dash: &'static str,
    points: impl Iterator<Item = (f64, f64)>,
) -> Curve {
    let path: Vec<String> = points
        .filter(|(m, r)| {
            (MASS_MSUN.0..=MASS_MSUN.1).contains(m) && (RADIUS_RSUN.0..=RADIUS_RSUN.1).contains(r)
        })
        .map(|(m, r)| format!("{:.1},{:.1}", x_of(m), y_of(r)))
        .collect();
    Curve { label: label.to_owned(), colour, dash, path: path.join(" ") }
}

/// Draws the relation.
///
/// # Errors
/// [`FigureError`] if the template and its values do not fit: a bug.
pub fn mass_radius_svg(tracks: &TrackTable) -> Result<String, FigureError> {
    let carbon_oxygen = Core::CarbonOxygen.composition();
    let cold: Vec<(f64, f64)> = (0..=120)
        .map(|i| {
            // Central relativity parameters from 0.2 (0.1 Msun) to 24 (the limit).
            let x = 0.2 * 120f64.powf(f64::from(i) / 120.0);
            let star = cold_star(x, &carbon_oxygen, ColdPressure::Coulomb, Gravity::Einstein);
            (star.mass_msun, star.radius_rsun)
        })
        .collect();
    // A star too light to be relativistic anchors R ~ M^(-1/3).
    let light = cold_star(0.05, &carbon_oxygen, ColdPressure::Ideal, Gravity::Newton);
    let constant = light.radius_rsun * light.mass_msun.cbrt();
    let mass_at = |i: i32| MASS_MSUN.0 + 0.01 * f64::from(i);
    let mut curves = vec![
        curve(
            "non-relativistic limit",
            "#888888",
            "2 4",
            (0..=140).map(|i| {
                let mass = mass_at(i);
                (mass, constant / mass.cbrt())
            }),
        ),
        curve("zero temperature, C/O", "#222222", "7 4", cold.into_iter()),
    ];
    for (teff_k, colour) in TEFFS_K.into_iter().zip(COLOURS) {
        let points = tracks.masses_msun().to_vec().into_iter().filter_map(|mass| {
            let point = tracks.at_mass(mass, teff_k, HydrogenLayer::Thick)?;
            Some((mass, point.radius_rsun))
        });
        curves.push(curve(&format!("{teff_k:.0} K"), colour, "", points));
    }
    let stars: Vec<Mark> = KNOWN
        .iter()
        .map(|known| Mark {
            name: known.name,
            x: x_of(known.mass_msun.0),
            y: y_of(known.radius_rsun.0),
            x_low: x_of(known.mass_msun.0 - known.mass_msun.1),
            x_high: x_of(known.mass_msun.0 + known.mass_msun.1),
            y_low: y_of(known.radius_rsun.0 - known.radius_rsun.1),
            y_high: y_of(known.radius_rsun.0 + known.radius_rsun.1),
        })
        .collect();
    let x_ticks: Vec<Tick> = (1..=7)
        .map(|i| 0.2 * f64::from(i))
        .map(|mass| Tick { at: x_of(mass), label: format!("{mass:.1}") })
        .collect();
    let y_ticks: Vec<Tick> = (0..=6)
        .map(|i| 0.005 * f64::from(i))
        .map(|radius| Tick { at: y_of(radius), label: format!("{radius:.3}") })
        .collect();
    let mut environment = Environment::new();
    environment.add_template("tracks.svg", include_str!("tracks_figure.svg.j2"))?;
    environment.set_auto_escape_callback(|_| minijinja::AutoEscape::Html);
    Ok(environment.get_template("tracks.svg")?.render(context! {
        curves => Serde(curves),
        stars => Serde(stars),
        x_ticks => Serde(x_ticks),
        y_ticks => Serde(y_ticks),
        left => LEFT,
        right => RIGHT,
        top => TOP,
        bottom => BOTTOM,
    })?)
}
