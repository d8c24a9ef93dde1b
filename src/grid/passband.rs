//! Photometric passbands, from `grids/passbands.csv`, which names their sources.

use std::sync::LazyLock;

/// Names of the bands, in the order in which magnitudes are given.
pub const BANDS: [&str; 9] =
    ["gaia_g", "gaia_bp", "gaia_rp", "sdss_u", "sdss_g", "sdss_r", "sdss_i", "sdss_z", "johnson_v"];

/// AB magnitude of 1 erg s^-1 cm^-2 Hz^-1, by definition (Oke & Gunn 1983, ApJ 266, 713).
const AB_ZERO_POINT_MAG: f64 = -48.60;
/// Speed of light, A/s.
const LIGHT_SPEED_AA_S: f64 = 2.997_924_58e18;

/// One passband.
#[derive(Debug, Clone, Default)]
pub struct Passband {
    /// Published magnitude less the AB magnitude.
    pub offset_mag: f64,
    wave_aa: Vec<f64>,
    response: Vec<f64>,
}

/// The passbands, in the order of [`BANDS`].
pub fn passbands() -> &'static [Passband; BANDS.len()] {
    static STORE: LazyLock<[Passband; BANDS.len()]> =
        LazyLock::new(|| BANDS.map(|band| parse(include_str!("../../grids/passbands.csv"), band)));
    &STORE
}

/// The rows of one band; a test makes sure that the table has all of them.
fn parse(table: &str, band: &str) -> Passband {
    let mut passband = Passband::default();
    for line in table.lines().filter(|line| line.starts_with(band)) {
        let mut numbers = line.split(',').skip(1).filter_map(|field| field.parse::<f64>().ok());
        if let (Some(offset_mag), Some(wave_aa), Some(response)) =
            (numbers.next(), numbers.next(), numbers.next())
        {
            passband.offset_mag = offset_mag;
            passband.wave_aa.push(wave_aa);
            passband.response.push(response);
        }
    }
    passband
}

impl Passband {
    /// Response to photons, zero outside.
    fn response(&self, wave_aa: f64) -> f64 {
        let after = self.wave_aa.partition_point(|wave| *wave < wave_aa);
        if after == 0 || after == self.wave_aa.len() {
            return 0.0;
        }
        let (a, b) = (self.wave_aa[after - 1], self.wave_aa[after]);
        let t = (wave_aa - a) / (b - a);
        self.response[after - 1] + t * (self.response[after] - self.response[after - 1])
    }

    /// Weights w of a flux on ascending wavelengths (A), linear between them, such that the magnitude is
    /// -2.5 log10 (sum of w F), F in erg s^-1 cm^-2 A^-1: photons caught, over those of a source of AB magnitude
    /// zero, in this band's own system.
    pub fn weights(&self, wave_aa: &[f64]) -> Vec<f64> {
        let mut weights = vec![0.0; wave_aa.len()];
        let mut nodes: Vec<f64> = wave_aa.iter().chain(&self.wave_aa).copied().collect();
        nodes.sort_by(f64::total_cmp);
        nodes.dedup();
        let mut flat_photons = 0.0;
        for pair in nodes.windows(2) {
            let (from, to) = (pair[0], pair[1]);
            let middle = 0.5 * (from + to);
            let response = self.response(middle) * (to - from);
            flat_photons += response / middle;
            let after = wave_aa.partition_point(|wave| *wave < middle);
            if response > 0.0 && after > 0 && after < wave_aa.len() {
                let (a, b) = (wave_aa[after - 1], wave_aa[after]);
                let t = (middle - a) / (b - a);
                weights[after - 1] += (1.0 - t) * response * middle;
                weights[after] += t * response * middle;
            }
        }
        // F_nu = lambda^2 / c F_lambda; photons go with F_nu / nu.
        let zero_flux = 10f64.powf(0.4 * AB_ZERO_POINT_MAG) * LIGHT_SPEED_AA_S * flat_photons;
        let scale = 10f64.powf(-0.4 * self.offset_mag) / zero_flux;
        weights.iter_mut().for_each(|weight| *weight *= scale);
        weights
    }

    /// Magnitude of a flux (erg s^-1 cm^-2 A^-1) on ascending wavelengths (A) that span the band.
    pub fn magnitude(&self, wave_aa: &[f64], flux: &[f64]) -> f64 {
        let photons: f64 = self.weights(wave_aa).iter().zip(flux).map(|(weight, flux)| weight * flux).sum();
        -2.5 * photons.log10()
    }
}
