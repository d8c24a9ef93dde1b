//! A two-dimensional image whose lines are wavelength, flux and perhaps error.
//!
//! Nothing marks it but its shape, two to four lines, and the lack of a spectral axis (a celestial one may be
//! left over from the frame), so it is tried last and its first line must be wavelengths.

use super::{Layout, broken, object};
use crate::spectrum::fits::FitsFile;
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, FEWEST_PIXELS};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "row-stack",
    title: "image of two to four lines: wavelength, flux, error",
    identified_by: "primary image of 2 to 4 lines without a spectral axis",
    rule: "line 0 is wavelength in the unit of XUNITS, line 1 flux in that of YUNITS, line 2 sigma; medium from VACUUM or AIRORVAC",
    reader: super::Reader::Fits { identify, read },
};

fn identify(fits: &FitsFile) -> bool {
    fits.hdus()[0].image().is_some_and(|image| {
        image.axes.len() == 2 && (2..=4).contains(&image.lines()) && image.length() >= FEWEST_PIXELS as u64
    })
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = &fits.hdus()[0];
    let (pixels, lines) = hdu.image().map_or((0, 0), |image| (image.length(), image.lines()));
    let line = |line: u64| fits.pixels(hdu, line * pixels, pixels);
    let wave = line(0)?;
    let is_ascending = wave.windows(2).all(|pair| pair[1] > pair[0]);
    let is_descending = wave.windows(2).all(|pair| pair[1] < pair[0]);
    if !(is_ascending || is_descending) {
        return Err(broken(
            LAYOUT.name,
            "found first line that neither ascends nor descends, need wavelengths",
        ));
    }
    let header = &hdu.header;
    Ok(vec![RawSpectrum {
        object: object::from_headers(&[header]),
        wave,
        flux: line(1)?,
        errors: (lines > 2).then(|| line(2)).transpose()?,
        wave_unit: UnitWords::of_wavelength("XUNITS", header.text("XUNITS")),
        flux_unit: match header.text("YUNITS") {
            Some(words) => UnitWords::of_flux("YUNITS", Some(words)),
            None => UnitWords::of_flux("BUNIT", header.text("BUNIT")),
        },
        error_kind: (lines > 2).then(|| Stated::new(ErrorKind::Sigma, "layout: line 2 is sigma")),
        medium: super::stated_medium(&[header]),
        resolution: super::stated_power(&[header]),
        velocity_frame: super::stated_frame(&[header]),
        ..RawSpectrum::default()
    }])
}
