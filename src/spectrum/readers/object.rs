//! Whose light it is, from the keywords that most files share.

use crate::spectrum::ObjectRecord;
use crate::spectrum::fits::{Header, Value};

/// Reads the common keywords; the first header that has one wins. Layouts overwrite what they know
/// better (the position of a fibre, the name in a target table).
pub fn from_headers(headers: &[&Header]) -> ObjectRecord {
    let text = |keys: &[&str]| first(headers, keys, |header, key| header.text(key).map(str::to_owned));
    let real = |keys: &[&str]| first(headers, keys, Header::real);
    ObjectRecord {
        name: text(&["ESO OBS TARG NAME"])
            .filter(|_| has_template_name(headers))
            .or_else(|| text(&["OBJECT", "TARGNAME", "TARGET", "TARGETID"])),
        ra_deg: first(headers, &["RA", "RA_TARG", "RA_OBJ"], right_ascension_deg),
        dec_deg: first(headers, &["DEC", "DEC_TARG", "DEC_OBJ"], declination_deg),
        position_epoch_yr: position_epoch_yr(headers),
        survey_id: survey_id_of(headers, &["OBID1", "ROOTNAME"]),
        observed_at: observed_at(headers),
        exposure_s: real(&["EXPTIME", "TEXPTIME", "EXPOSURE", "EXPOSED", "ITIME"])
            .filter(|exposure| *exposure > 0.0),
        airmass: airmass(headers),
        instrument: join(&[text(&["TELESCOP"]), text(&["INSTRUME"])], " "),
        site: site(headers),
        program: text(&["PROG_ID", "ESO OBS PROG ID", "PROPID", "PROGRAM", "PROPOSID", "PROPOSAL"]),
    }
}

/// Files of some ESO pipelines name the template in OBJECT and the star in a keyword of its own.
fn has_template_name(headers: &[&Header]) -> bool {
    let is_template = |name: &str| {
        let mut letters = name.chars().filter(|c| c.is_alphabetic());
        name.contains('_') && letters.all(|c| c.is_ascii_uppercase()) && !name.contains(char::is_whitespace)
    };
    first(headers, &["OBJECT"], |header, key| header.text(key).map(is_template)).unwrap_or(true)
}

/// Mean of start and end where a file gives both.
fn airmass(headers: &[&Header]) -> Option<f64> {
    let one =
        |keys: &[&str]| first(headers, keys, Header::real).filter(|airmass| (1.0..40.0).contains(airmass));
    one(&["AIRMASS", "SECZ", "AM"]).or_else(|| {
        let start = one(&["AMSTART", "ESO TEL AIRM START"])?;
        let end = one(&["AMEND", "ESO TEL AIRM END"]).unwrap_or(start);
        Some(0.5 * (start + end))
    })
}

/// Julian year of the position. EQUINOX is that of the axes and says nothing about it, and EPOCH is an
/// old name of EQUINOX.
fn position_epoch_yr(headers: &[&Header]) -> Option<f64> {
    let is_year = |year: &f64| (1850.0..2200.0).contains(year);
    first(headers, &["ESO TEL TARG EPOCH", "TARGEPOC"], Header::real).filter(is_year)
}

/// Name of the site, else its longitude and latitude.
fn site(headers: &[&Header]) -> Option<String> {
    let named =
        |header: &Header, key: &str| header.text(key).map(str::to_owned).filter(|name| !name.is_empty());
    first(headers, &["OBSERVAT", "OBSERVATORY", "SITENAME", "SITE", "SITEID"], named).or_else(|| {
        let longitude = first(headers, &["LONGITUD", "SITELONG", "GEOLON", "ESO TEL GEOLON"], Header::real)?;
        let latitude = first(headers, &["LATITUDE", "SITELAT", "GEOLAT", "ESO TEL GEOLAT"], Header::real)?;
        let is_place = (-360.0..=360.0).contains(&longitude) && (-90.0..=90.0).contains(&latitude);
        is_place.then(|| format!("longitude {longitude} latitude {latitude}"))
    })
}

fn survey_id_of(headers: &[&Header], keys: &[&str]) -> Option<String> {
    headers.iter().find_map(|header| survey_id(header, keys))
}

/// Name, value pairs as `name=value name=value`, for identifiers of a survey.
pub fn survey_id(header: &Header, keys: &[&str]) -> Option<String> {
    let parts: Vec<Option<String>> =
        keys.iter().map(|key| header.words(key).map(|value| format!("{key}={value}"))).collect();
    join(&parts, " ")
}

/// Degrees, or hours where written with colons or blanks; none outside 0 to 360 degrees.
pub fn right_ascension_deg(header: &Header, key: &str) -> Option<f64> {
    angle(header, key, 15.0).filter(|angle| (0.0..=360.0).contains(angle))
}

/// Degrees; none outside -90 to 90.
pub fn declination_deg(header: &Header, key: &str) -> Option<f64> {
    angle(header, key, 1.0).filter(|angle| (-90.0..=90.0).contains(angle))
}

fn first<T>(headers: &[&Header], keys: &[&str], read: impl Fn(&Header, &str) -> Option<T>) -> Option<T> {
    keys.iter().flat_map(|key| headers.iter().map(move |header| (header, key))).find_map(|(h, k)| read(h, k))
}

/// A number is in degrees; three parts are sexagesimal, in units of `degrees_per_unit`.
fn angle(header: &Header, key: &str, degrees_per_unit: f64) -> Option<f64> {
    match header.value(key)? {
        Value::Text(text) => {
            let parts: Vec<&str> = text.trim().split([':', ' ']).filter(|part| !part.is_empty()).collect();
            match parts.as_slice() {
                [degrees] => degrees.parse().ok(),
                [units, minutes, seconds] => {
                    let sign = if units.starts_with('-') { -1.0 } else { 1.0 };
                    let units: f64 = units.parse().ok()?;
                    let (minutes, seconds): (f64, f64) = (minutes.parse().ok()?, seconds.parse().ok()?);
                    Some(sign * (units.abs() + minutes / 60.0 + seconds / 3600.0) * degrees_per_unit)
                }
                _ => None,
            }
        }
        Value::Integer(_) | Value::Real(_) => header.real(key),
        Value::Logical(_) | Value::Other(_) => None,
    }
}

/// `DATE-OBS`, with the time from its own keyword where the date has none; else the MJD.
fn observed_at(headers: &[&Header]) -> Option<String> {
    let text = |keys: &[&str]| first(headers, keys, |header, key| header.text(key).map(str::to_owned));
    if let Some(date) = text(&["DATE-OBS", "DATE_OBS"]) {
        let time = text(&["TIME-OBS", "UTSTART", "UT"]).filter(|time| time.contains(':'));
        return Some(match time {
            Some(time) if !date.contains('T') => format!("{date}T{time}"),
            _ => date,
        });
    }
    // 1900 to 2200; files are known that keep a Julian date under MJD.
    let is_plausible = |mjd: &f64| (15_000.0..125_000.0).contains(mjd);
    let mjd = first(headers, &["MJD-OBS", "MJD_OBS", "MJD", "EXPSTART"], Header::real).filter(is_plausible);
    // International atomic time in seconds since MJD 0; its 37 s from universal time do not matter here.
    let tai = || first(headers, &["TAI", "TAI-BEG"], Header::real).map(|seconds| seconds / 86400.0);
    let julian = || first(headers, &["JD", "JULDATE"], Header::real).map(|days| days - 2_400_000.5);
    mjd.or_else(|| tai().filter(is_plausible))
        .or_else(|| julian().filter(is_plausible))
        .map(|mjd| format!("MJD {mjd}"))
}

/// The known ones of several parts in one line.
pub fn join(parts: &[Option<String>], separator: &str) -> Option<String> {
    let found: Vec<&str> = parts.iter().flatten().map(String::as_str).collect();
    (!found.is_empty()).then(|| found.join(separator))
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;

    fn header(cards: &[&str]) -> Header {
        let text: String = cards.iter().map(|card| format!("{card:80}")).collect();
        Header::parse(text.as_bytes())
    }

    #[test]
    fn positions_are_read_in_both_spellings() {
        // GD 71, SIMBAD position: 05 52 27.62 +15 53 13.2.
        let sexagesimal = header(&["RA      = '05:52:27.62'", "DEC     = '+15 53 13.2'"]);
        let record = from_headers(&[&sexagesimal]);
        assert!((record.ra_deg.unwrap() - 88.115_083).abs() < 1e-6);
        assert!((record.dec_deg.unwrap() - 15.887).abs() < 1e-6);
        let southern = header(&["RA      =  12.5", "DEC     = '-00:30:00'"]);
        let record = from_headers(&[&southern]);
        assert_eq!((record.ra_deg, record.dec_deg), (Some(12.5), Some(-0.5)));
    }

    #[test]
    fn impossible_values_are_not_reported() {
        let odd = header(&["RA      =  1e9", "DEC     = 'n/a'", "AIRMASS =  0.0", "MJD     = 2965661"]);
        let record = from_headers(&[&odd]);
        assert_eq!(
            (record.ra_deg, record.dec_deg, record.airmass, record.observed_at),
            (None, None, None, None)
        );
    }
}
