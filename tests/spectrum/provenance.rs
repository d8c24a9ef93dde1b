//! Whose light it is and where it was taken, from headers as different pipelines write them.

use emberline::spectrum::ObjectRecord;

use super::{lenient, ramp, read_bytes};
use crate::support::fits_bytes::FitsBytes;

fn record(cards: &[&str]) -> ObjectRecord {
    let (_, flux, _) = ramp();
    let axis = ["CRVAL1  =               4000.0", "CDELT1  =                  5.0", "CUNIT1  = 'Angstrom'"];
    let cards: Vec<&str> = axis.iter().chain(cards).copied().collect();
    let mut outcomes = read_bytes(FitsBytes::image(&cards, &[200], &flux).bytes(), &lenient());
    outcomes.remove(0).unwrap().object
}

#[test]
fn a_header_of_the_iraf_tradition() {
    let found = record(&[
        "OBJECT  = 'KF J0101'",
        "RA      = '01:01:00'",
        "DEC     = '-10:30:00'",
        "DATE-OBS= '2026-03-01'",
        "UT      = '04:05:06.7'",
        "EXPTIME = 1800",
        "AIRMASS = 1.25",
        "TELESCOP= 'KFT'",
        "INSTRUME= 'KFS-1'",
        "OBSERVAT= 'Kestrel Fell'",
        "PROPID  = 'KF-12'",
    ]);
    assert_eq!(found.name.as_deref(), Some("KF J0101"));
    assert_eq!((found.ra_deg, found.dec_deg), (Some(15.25), Some(-10.5)));
    assert_eq!(found.observed_at.as_deref(), Some("2026-03-01T04:05:06.7"));
    assert_eq!((found.exposure_s, found.airmass), (Some(1800.0), Some(1.25)));
    assert_eq!(found.instrument.as_deref(), Some("KFT KFS-1"));
    assert_eq!(found.site.as_deref(), Some("Kestrel Fell"));
    assert_eq!(found.program.as_deref(), Some("KF-12"));
    assert_eq!(found.position_epoch_yr, None);
}

#[test]
fn a_header_of_the_eso_tradition() {
    let found = record(&[
        "ORIGIN  = 'ESO'",
        "OBJECT  = 'RED_SCI_POINT_BLUE'",
        "HIERARCH ESO OBS TARG NAME = 'KF J0102'",
        "HIERARCH ESO TEL AIRM START = 1.1",
        "HIERARCH ESO TEL AIRM END = 1.3",
        "HIERARCH ESO TEL GEOLON = -70.4",
        "HIERARCH ESO TEL GEOLAT = -24.6",
        "HIERARCH ESO OBS PROG ID = '123.D-0001(A)'",
        "MJD-OBS = 60310.5",
        "RA      = 15.5",
        "DEC     = -11.5",
        "OBID1   = 200300",
    ]);
    // OBJECT holds the name of the template.
    assert_eq!(found.name.as_deref(), Some("KF J0102"));
    assert_eq!(found.airmass, Some(0.5 * (1.1 + 1.3)));
    assert_eq!(found.site.as_deref(), Some("longitude -70.4 latitude -24.6"));
    assert_eq!(found.program.as_deref(), Some("123.D-0001(A)"));
    assert_eq!(found.observed_at.as_deref(), Some("MJD 60310.5"));
    assert_eq!(found.survey_id.as_deref(), Some("OBID1=200300"));
}

#[test]
fn an_epoch_is_that_of_the_position_and_dates_have_many_spellings() {
    let found = record(&["HIERARCH ESO TEL TARG EPOCH = 2015.5", "EQUINOX = 2000.0", "TAI     = 4.5E9"]);
    assert_eq!(found.position_epoch_yr, Some(2015.5));
    assert_eq!(found.observed_at, Some(format!("MJD {}", 4.5e9 / 86400.0)));
    // An equinox is no epoch; a Julian date under MJD is none; places off the Earth are none.
    let found = record(&["EQUINOX = 2000.0", "MJD     = 2965661", "SITELONG= 500.0", "SITELAT = 10.0"]);
    assert_eq!((found.position_epoch_yr, found.observed_at, found.site), (None, None, None));
    let found = record(&["JD      = 2460310.75"]);
    assert_eq!(found.observed_at.as_deref(), Some("MJD 60310.25"));
}
