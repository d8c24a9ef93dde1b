//! A sighting as the file that a pipeline would have written: a FITS binary table, one row per pixel.
//!
//! Everything that a reader could ask is stated: wavelengths in vacuum angstroms (the column's name),
//! barycentric frame, unit of the fluxes, standard deviations, width of the line-spread function
//! of each pixel, mask. Doubles are kept, so that what is read back is what was invented, bit by bit.
//!
//! # Reference
//! FITS Standard 4.0 (2016), sections 4.4 and 7.3.

use super::night::Sighting;

const CARD_BYTES: usize = 80;
const BLOCK_BYTES: usize = 2880;
/// Four columns of doubles and one of bytes.
const ROW_BYTES: usize = 4 * 8 + 1;

/// The bytes of the file.
pub fn fits_table(sighting: &Sighting) -> Vec<u8> {
    let spectrum = &sighting.spectrum;
    let rows = spectrum.wave_vac_aa().len();
    let flux_unit = if spectrum.is_flux_calibrated() { "erg/s/cm2/Angstrom" } else { "counts" };
    let mut bytes = Vec::with_capacity(4 * BLOCK_BYTES + rows * ROW_BYTES);
    push_header(
        &mut bytes,
        &[
            value("SIMPLE", "T"),
            value("BITPIX", "8"),
            value("NAXIS", "0"),
            value("EXTEND", "T"),
            text("OBJECT", &sighting.name),
            text("TELESCOP", "Kestrel Fell"),
            text("INSTRUME", &format!("KFS {} A", sighting.fwhm_aa)),
            text("SPECSYS", "BARYCENT"),
            text("ORIGIN", "emberline rehearse: an invented star"),
        ],
    );
    let mut cards = vec![
        text("XTENSION", "BINTABLE"),
        value("BITPIX", "8"),
        value("NAXIS", "2"),
        value("NAXIS1", &ROW_BYTES.to_string()),
        value("NAXIS2", &rows.to_string()),
        value("PCOUNT", "0"),
        value("GCOUNT", "1"),
        value("TFIELDS", "5"),
    ];
    let columns = [
        ("WAVE_VAC", "1D", "Angstrom"),
        ("FLUX", "1D", flux_unit),
        ("SIGMA", "1D", flux_unit),
        ("FWHM", "1D", "Angstrom"),
        ("GOOD", "1B", ""),
    ];
    for (number, (name, form, unit)) in (1..).zip(columns) {
        cards.push(text(&format!("TTYPE{number}"), name));
        cards.push(text(&format!("TFORM{number}"), form));
        if !unit.is_empty() {
            cards.push(text(&format!("TUNIT{number}"), unit));
        }
    }
    push_header(&mut bytes, &cards);
    for pixel in 0..rows {
        let wave = spectrum.wave_vac_aa()[pixel];
        let fwhm_aa = spectrum.resolution().fwhm_aa(pixel, wave);
        for double in [wave, spectrum.flux()[pixel], spectrum.sigma()[pixel], fwhm_aa] {
            bytes.extend_from_slice(&double.to_be_bytes());
        }
        bytes.push(u8::from(spectrum.is_good()[pixel]));
    }
    fill_block(&mut bytes, 0);
    bytes
}

fn value(key: &str, value: &str) -> String {
    format!("{key:8}= {value:>20}")
}

fn text(key: &str, text: &str) -> String {
    format!("{key:8}= '{:8}'", text.replace('\'', "''"))
}

fn push_header(bytes: &mut Vec<u8>, cards: &[String]) {
    for card in cards.iter().map(String::as_str).chain(["END"]) {
        bytes.extend_from_slice(format!("{card:CARD_BYTES$.CARD_BYTES$}").as_bytes());
    }
    fill_block(bytes, b' ');
}

fn fill_block(bytes: &mut Vec<u8>, padding: u8) {
    bytes.resize(bytes.len().next_multiple_of(BLOCK_BYTES), padding);
}
