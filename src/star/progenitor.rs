//! Mass on the main sequence of the star that left a white dwarf.
//!
//! In: white dwarf mass; out: initial mass, both solar. The semi-empirical relation of Cummings et
//! al. (2018, ApJ 866, 21, eqs 4-6, MIST isochrones): three straight pieces, from memory; that they meet is
//! tested here. Scatter about the relation is 0.06 - 0.1 Msun in final mass and not in the errors.

/// Pieces: lowest initial mass, slope, final mass at zero.
const PIECES: [(f64, f64, f64); 3] = [(0.83, 0.080, 0.489), (2.85, 0.187, 0.184), (3.60, 0.107, 0.471)];
/// Highest initial mass of the relation.
const HIGHEST_INITIAL_MSUN: f64 = 7.20;

/// White dwarf masses that the relation covers, solar.
pub fn final_mass_range_msun() -> (f64, f64) {
    let (first, last) = (PIECES[0], PIECES[PIECES.len() - 1]);
    (first.1 * first.0 + first.2, last.1 * HIGHEST_INITIAL_MSUN + last.2)
}

/// Initial mass of a white dwarf mass; `None` outside the relation.
pub fn initial_mass_msun(final_mass_msun: f64) -> Option<f64> {
    let (low, high) = final_mass_range_msun();
    if !(low..=high).contains(&final_mass_msun) {
        return None;
    }
    let (_, slope, zero) =
        PIECES.iter().rev().find(|(from, slope, zero)| final_mass_msun >= slope * from + zero).copied()?;
    Some((final_mass_msun - zero) / slope)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Pieces meet within the rounding of the published coefficients (0.001 Msun), and the relation inverts.
    #[test]
    fn pieces_meet() {
        for pair in PIECES.windows(2) {
            let (from, slope, zero) = pair[1];
            let below = pair[0].1 * from + pair[0].2;
            assert!((below - (slope * from + zero)).abs() < 1.1e-3, "{below}");
        }
        assert_eq!(initial_mass_msun(0.50), None);
        assert_eq!(initial_mass_msun(1.30), None);
        let back = initial_mass_msun(0.6).map(|initial| 0.080 * initial + 0.489);
        assert!(back.is_some_and(|mass| (mass - 0.6).abs() < 1e-12), "{back:?}");
    }
}
