//! IRAF multispec: an image whose lines each have a dispersion of their own, written as text in the
//! `WAT2_nnn` keywords.
//!
//! `specN = "ap beam dtype w1 dw nw z aplow aphigh [wt w0 ftype ...]..."`, with dtype 0 linear, 1
//! log10, 2 a weighted sum of functions (1 Chebyshev, 2 Legendre, 3 cubic spline, 4 linear spline, 5
//! and 6 tables). Wavelengths are divided by 1 + z. Each text card holds 68 characters whose trailing
//! blanks readers strip, so cards are padded back before they are joined.
//!
//! # Reference
//! Valdes 1993, "The IRAF/NOAO spectral world coordinate systems", as in IRAF's `specwcs` help page.

use super::image::{LineAxis, iraf_unit, read_lines};
use super::{Layout, broken};
use crate::spectrum::fits::{FitsFile, Header};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, UnitWords};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "iraf-multispec",
    title: "IRAF multispec images: apertures or echelle orders with a dispersion each",
    identified_by: "CTYPE1 = MULTISPE or WAT0_001 with system=multispec, and WAT2_001",
    rule: "wavelengths from WAT2_nnn, unit from WAT1_001; medium and resolution usually from the configuration; errors from a sigma band if there is one",
    reader: super::Reader::Fits { identify, read },
};

/// Characters of text in one WAT card.
const CARD_TEXT: usize = 68;
/// Longest polynomial or table that is believed.
const MOST_COEFFICIENTS: usize = 20_000;

fn identify(fits: &FitsFile) -> bool {
    let primary = &fits.hdus()[0];
    let is_multispec = primary.header.text("CTYPE1").is_some_and(|kind| kind.starts_with("MULTISPE"))
        || primary.header.text("WAT0_001").is_some_and(|words| words.contains("system=multispec"));
    is_multispec && primary.image().is_some() && primary.header.has("WAT2_001")
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = &fits.hdus()[0];
    let header = &hdu.header;
    let text = joined_text(header);
    let unit = iraf_unit(header);
    // Logical pixels of a trimmed image are not the pixels of the fit: p = (l - LTV1) / LTM1_1.
    let (shift, scale) = (header.real("LTV1").unwrap_or(0.0), header.real("LTM1_1").unwrap_or(1.0));
    read_lines(fits, hdu, LAYOUT.name, |line, length| {
        let fault = |detail: String| broken(LAYOUT.name, format!("spec{}: {detail}", line + 1));
        let numbers = spec_numbers(&text, line + 1).map_err(fault)?;
        let dispersion = Dispersion::parse(&numbers).map_err(fault)?;
        let pixels = dispersion.pixels.min(length);
        let wave = (1..=pixels).map(|pixel| dispersion.wavelength((pixel as f64 - shift) / scale)).collect();
        Ok(LineAxis {
            wave,
            wave_unit: UnitWords::of_wavelength("WAT1_001 units", unit.as_deref()),
            medium: None,
            flags: Vec::new(),
        })
    })
}

fn joined_text(header: &Header) -> String {
    let mut text = String::new();
    for number in 1..=999 {
        let Some(card) = header.text_as_written(&format!("WAT2_{number:03}")) else { break };
        text.push_str(&format!("{card:CARD_TEXT$}"));
    }
    text
}

/// The numbers between the quotes of `specN = "..."`.
fn spec_numbers(text: &str, line: usize) -> Result<Vec<f64>, String> {
    let key = format!("spec{line}");
    let mut rest = text;
    let quoted = loop {
        let at = rest.find(&key).ok_or("found no dispersion")?;
        rest = &rest[at + key.len()..];
        // spec1 is also the start of spec10.
        if let Some(value) = rest.trim_start().strip_prefix('=') {
            break value.trim_start().strip_prefix('"').ok_or("found no quoted dispersion")?;
        }
    };
    let inside = quoted.split('"').next().unwrap_or_default();
    inside
        .split_whitespace()
        .map(|word| word.parse().map_err(|_| format!("found {word:?}, need a number")))
        .collect()
}

/// How the pixels of one line become wavelengths.
struct Dispersion {
    pixels: usize,
    redshift: f64,
    form: Form,
}

enum Form {
    Linear { first: f64, step: f64 },
    Log10 { first: f64, step: f64 },
    Sum(Vec<Term>),
}

/// One weighted function with a zero point.
struct Term {
    weight: f64,
    zero: f64,
    function: Function,
}

enum Function {
    Chebyshev { low: f64, high: f64, coefficients: Vec<f64> },
    Legendre { low: f64, high: f64, coefficients: Vec<f64> },
    CubicSpline { low: f64, high: f64, coefficients: Vec<f64> },
    LinearSpline { low: f64, high: f64, coefficients: Vec<f64> },
    Wavelengths(Vec<f64>),
    Pairs(Vec<(f64, f64)>),
}

impl Dispersion {
    fn parse(numbers: &[f64]) -> Result<Self, String> {
        let &[_aperture, _beam, kind, first, step, pixels, redshift, _low, _high, ..] = numbers else {
            return Err(format!("found {} numbers, need at least 9", numbers.len()));
        };
        if !(pixels >= 0.0 && redshift > -1.0) {
            return Err(format!("found {pixels} pixels and redshift {redshift}"));
        }
        let form = match kind as i64 {
            0 => Form::Linear { first, step },
            1 => Form::Log10 { first, step },
            2 => Form::Sum(parse_terms(&numbers[9..])?),
            other => return Err(format!("found dispersion type {other}, need 0, 1 or 2 (not calibrated?)")),
        };
        Ok(Dispersion { pixels: pixels as usize, redshift, form })
    }

    fn wavelength(&self, pixel: f64) -> f64 {
        let stretch = 1.0 + self.redshift;
        match &self.form {
            Form::Linear { first, step } => (first + step * (pixel - 1.0)) / stretch,
            // As documented, the redshift divides the exponent.
            Form::Log10 { first, step } => 10f64.powf((first + step * (pixel - 1.0)) / stretch),
            Form::Sum(terms) => {
                let value = |term: &Term| term.weight * (term.zero + term.function.value(pixel));
                terms.iter().map(value).sum::<f64>() / stretch
            }
        }
    }
}

fn parse_terms(numbers: &[f64]) -> Result<Vec<Term>, String> {
    let mut terms = Vec::new();
    let mut rest = numbers;
    while let [weight, zero, kind, after @ ..] = rest {
        let (function, after) = parse_function(*kind as i64, after)?;
        terms.push(Term { weight: *weight, zero: *zero, function });
        rest = after;
    }
    if terms.is_empty() || !rest.is_empty() {
        return Err(format!("found {} functions and {} numbers left over", terms.len(), rest.len()));
    }
    Ok(terms)
}

fn parse_function(kind: i64, numbers: &[f64]) -> Result<(Function, &[f64]), String> {
    let (count, after) = numbers.split_first().ok_or("found a function without numbers")?;
    let count = *count;
    if !(count >= 1.0 && count <= MOST_COEFFICIENTS as f64) {
        return Err(format!("found a function of order {count}"));
    }
    let count = count as usize;
    let take = |numbers: &[f64], length: usize| -> Result<(Vec<f64>, usize), String> {
        let taken = numbers
            .get(..length)
            .ok_or_else(|| format!("found a function cut short, need {length} numbers"))?;
        Ok((taken.to_vec(), length))
    };
    if kind == 5 {
        let (waves, used) = take(after, count)?;
        return Ok((Function::Wavelengths(waves), &after[used..]));
    }
    if kind == 6 {
        let (_dummy, pairs) = after.split_first().ok_or("found a table cut short")?;
        let (values, used) = take(pairs, 2 * count)?;
        let pairs_found = values.chunks_exact(2).map(|pair| (pair[0], pair[1])).collect();
        return Ok((Function::Pairs(pairs_found), &pairs[used..]));
    }
    let [low, high, after @ ..] = after else { return Err("found a function without limits".to_owned()) };
    let (low, high) = (*low, *high);
    let length = match kind {
        1 | 2 => count,
        3 => count + 3,
        4 => count + 1,
        other => return Err(format!("found function type {other}, need 1 to 6")),
    };
    let (coefficients, used) = take(after, length)?;
    let function = match kind {
        1 => Function::Chebyshev { low, high, coefficients },
        2 => Function::Legendre { low, high, coefficients },
        3 => Function::CubicSpline { low, high, coefficients },
        _ => Function::LinearSpline { low, high, coefficients },
    };
    Ok((function, &after[used..]))
}

impl Function {
    fn value(&self, pixel: f64) -> f64 {
        match self {
            Function::Chebyshev { low, high, coefficients } => {
                let n = normalised(pixel, *low, *high);
                recurrence(coefficients, n, |_, last, before| 2.0 * n * last - before)
            }
            Function::Legendre { low, high, coefficients } => {
                let n = normalised(pixel, *low, *high);
                recurrence(coefficients, n, |k, last, before| {
                    ((2.0 * k - 1.0) * n * last - (k - 1.0) * before) / k
                })
            }
            Function::CubicSpline { low, high, coefficients } => {
                let (piece, a, b) = piece(pixel, *low, *high, coefficients.len() - 3);
                let c = &coefficients[piece..];
                c[0] * a.powi(3)
                    + c[1] * (1.0 + 3.0 * a * (1.0 + a * b))
                    + c[2] * (1.0 + 3.0 * b * (1.0 + a * b))
                    + c[3] * b.powi(3)
            }
            Function::LinearSpline { low, high, coefficients } => {
                let (piece, a, b) = piece(pixel, *low, *high, coefficients.len() - 1);
                coefficients[piece] * a + coefficients[piece + 1] * b
            }
            Function::Wavelengths(waves) => {
                let pairs: Vec<(f64, f64)> =
                    waves.iter().enumerate().map(|(index, wave)| (index as f64 + 1.0, *wave)).collect();
                interpolate(&pairs, pixel)
            }
            Function::Pairs(pairs) => interpolate(pairs, pixel),
        }
    }
}

fn normalised(pixel: f64, low: f64, high: f64) -> f64 {
    (pixel - 0.5 * (high + low)) / (0.5 * (high - low))
}

/// Sum of coefficients times polynomials that start with 1 and n; `next(k, p_(k-1), p_(k-2))`.
fn recurrence(coefficients: &[f64], n: f64, next: impl Fn(f64, f64, f64) -> f64) -> f64 {
    let (mut before, mut last) = (1.0, n);
    let mut sum = 0.0;
    for (k, coefficient) in coefficients.iter().enumerate() {
        let polynomial = match k {
            0 => 1.0,
            1 => n,
            _ => {
                let polynomial = next(k as f64, last, before);
                before = last;
                last = polynomial;
                polynomial
            }
        };
        sum += coefficient * polynomial;
    }
    sum
}

/// Spline piece of a pixel, and its distances to the piece's ends.
fn piece(pixel: f64, low: f64, high: f64, pieces: usize) -> (usize, f64, f64) {
    let s = (pixel - low) / (high - low) * pieces as f64;
    // Also for s that is not a number: `as` gives 0.
    let piece = (s.max(0.0) as usize).min(pieces - 1);
    let b = s - piece as f64;
    (piece, 1.0 - b, b)
}

/// Straight lines through (pixel, wavelength) pairs, extended at the ends.
fn interpolate(pairs: &[(f64, f64)], pixel: f64) -> f64 {
    let Some(last) = pairs.len().checked_sub(2) else {
        return pairs.first().map_or(f64::NAN, |pair| pair.1);
    };
    let after = pairs.iter().position(|pair| pair.0 > pixel).unwrap_or(pairs.len());
    let start = after.saturating_sub(1).min(last);
    let ((x0, y0), (x1, y1)) = (pairs[start], pairs[start + 1]);
    y0 + (y1 - y0) * (pixel - x0) / (x1 - x0)
}
