//! One image extension per quantity: `FLUX`, `WAVELENGTH` and perhaps `ERROR`, each one-dimensional.
//!
//! Nothing in such a file tells units or medium beyond `BUNIT` of each extension.

use super::{Layout, broken, object};
use crate::spectrum::ErrorKind;
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "image-set",
    title: "one-dimensional images FLUX, WAVELENGTH and ERROR or IVAR",
    identified_by: "one-dimensional images named FLUX and WAVELENGTH of equal length",
    rule: "units from BUNIT of each image; ERROR is sigma; medium from VACUUM or AIRORVAC",
    reader: super::Reader::Fits { identify, read },
};

const ERROR_NAMES: &[(&str, ErrorKind)] = &[
    ("ERROR", ErrorKind::Sigma),
    ("ERR", ErrorKind::Sigma),
    ("SIGMA", ErrorKind::Sigma),
    ("IVAR", ErrorKind::InverseVariance),
    ("VARIANCE", ErrorKind::Variance),
];

/// A one-dimensional image of this name; the primary unit may be named as well.
fn line<'a>(fits: &'a FitsFile, name: &str) -> Option<&'a Hdu> {
    fits.hdu_named(name).filter(|hdu| hdu.image().is_some_and(|image| image.axes.len() == 1))
}

fn identify(fits: &FitsFile) -> bool {
    match (line(fits, "FLUX"), line(fits, "WAVELENGTH")) {
        (Some(flux), Some(wave)) => flux.image().map(|i| i.length()) == wave.image().map(|i| i.length()),
        _ => false,
    }
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let need =
        |name: &str| line(fits, name).ok_or_else(|| broken(LAYOUT.name, format!("found no {name} image")));
    let (flux, wave) = (need("FLUX")?, need("WAVELENGTH")?);
    let values = |hdu: &Hdu| fits.pixels(hdu, 0, hdu.image().map_or(0, |image| image.length()));
    let error = ERROR_NAMES.iter().find_map(|(name, kind)| line(fits, name).map(|hdu| (hdu, *name, *kind)));
    let primary = &fits.hdus()[0].header;
    let headers = [&flux.header, primary];
    Ok(vec![RawSpectrum {
        object: object::from_headers(&headers),
        hdu: flux.index,
        row: None,
        wave: values(wave)?,
        flux: values(flux)?,
        errors: error.map(|(hdu, ..)| values(hdu)).transpose()?,
        is_good: None,
        wave_unit: UnitWords::of_wavelength("BUNIT", wave.header.text("BUNIT")),
        flux_unit: UnitWords::of_flux("BUNIT", flux.header.text("BUNIT")),
        error_kind: error.map(|(_, name, kind)| Stated::new(kind, format!("image {name}"))),
        medium: super::stated_medium(&[&wave.header, primary]),
        resolution: super::stated_power(&headers),
        velocity_frame: super::stated_frame(&headers),
        flags: Vec::new(),
        exposure_of: None,
    }])
}
