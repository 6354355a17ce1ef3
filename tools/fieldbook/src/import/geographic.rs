//! From latitude, longitude and altitude to the site frame: a plane that touches the Earth at an origin.
//!
//! WGS 84 geographic coordinates become geocentric ones and are turned into east, north and up at the origin, by EPSG's
//! coordinate operation method 9837 (IOGP Publication 373-7-2, "Geographic/topocentric conversions"). x is east, y is north;
//! up is left out, so the plan lies in the plane.

use super::track::Refused;
use geodesy::prelude::{Coor3D, CoordinateTuple as _, Ellipsoid, GeoCart as _};
use serde_json::{Value, json};
use trackhold_core::math;

/// Beyond this distance from the origin the plane shortens horizontal distances by more than a millionth, m.
const FAR_M: f64 = 9_000.0;
/// Beyond this distance the plane is refused, m: it shortens by more than a hundred-thousandth, and the Earth has fallen away
/// by seventy metres.
const TOO_FAR_M: f64 = 30_000.0;

/// A place on Earth, WGS 84.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Origin {
    /// Geodetic latitude, degrees, positive to the north.
    pub latitude_deg: f64,
    /// Longitude, degrees, positive to the east.
    pub longitude_deg: f64,
    /// Height above the ellipsoid, m. Heights above the sea differ by at most 110 m, which changes distances by less than
    /// two parts in a hundred thousand.
    pub altitude_m: f64,
}

impl Origin {
    /// A place, checked.
    ///
    /// # Errors
    /// Which number lies outside which bound.
    pub fn new(latitude_deg: f64, longitude_deg: f64, altitude_m: f64) -> Result<Self, String> {
        for (name, value, bound, unit) in [
            ("latitude", latitude_deg, 90.0, "°"),
            ("longitude", longitude_deg, 180.0, "°"),
            ("altitude", altitude_m, 20_000.0, " m"),
        ] {
            if !value.is_finite() || value.abs() > bound {
                let hint = if name == "latitude" && value.abs() <= 180.0 {
                    "; are latitude and longitude the wrong way round?"
                } else {
                    ""
                };
                return Err(format!("{name} {value} lies outside ±{bound}{unit}{hint}"));
            }
        }
        Ok(Self { latitude_deg, longitude_deg, altitude_m })
    }

    pub(super) fn fields(&self) -> Vec<(&'static str, Value)> {
        vec![
            ("latitude_deg", json!(self.latitude_deg)),
            ("longitude_deg", json!(self.longitude_deg)),
            ("altitude_m", json!(self.altitude_m)),
        ]
    }

    /// Geocentric coordinates, m.
    fn geocentric(&self) -> [f64; 3] {
        // The ellipsoid's defining numbers: NGA.STND.0036, World Geodetic System 1984.
        let ellipsoid = Ellipsoid::new(6_378_137.0, 1.0 / 298.257_223_563);
        let (longitude, latitude) = (self.longitude_deg.to_radians(), self.latitude_deg.to_radians());
        let (x, y, z, _) = ellipsoid.cartesian(&Coor3D::raw(longitude, latitude, self.altitude_m)).xyzt();
        [x, y, z]
    }

    /// East, north and up of another place in the plane at this one, m.
    pub fn to_plane(&self, place: &Self) -> [f64; 3] {
        let (origin, place) = (self.geocentric(), place.geocentric());
        let [dx, dy, dz] = [0, 1, 2].map(|axis| place[axis] - origin[axis]);
        let (cos_lat, sin_lat) = math::cos_sin(self.latitude_deg.to_radians());
        let (cos_lon, sin_lon) = math::cos_sin(self.longitude_deg.to_radians());
        [
            -sin_lon * dx + cos_lon * dy,
            -sin_lat * cos_lon * dx - sin_lat * sin_lon * dy + cos_lat * dz,
            cos_lat * cos_lon * dx + cos_lat * sin_lon * dy + sin_lat * dz,
        ]
    }

    /// x and y in the site frame, m.
    ///
    /// # Errors
    /// If the place is too far away for a plane.
    pub fn to_site(&self, place: &Self) -> Result<(f64, f64), String> {
        let [east, north, _] = self.to_plane(place);
        let distance = math::length(east, north);
        if distance > TOO_FAR_M {
            return Err(format!(
                "{:.1} km from the origin ({}, {}); a plane holds at most {} km: choose --origin nearer",
                distance / 1e3,
                self.latitude_deg,
                self.longitude_deg,
                TOO_FAR_M / 1e3
            ));
        }
        Ok((east, north))
    }

    /// What a path that reaches `distance_m` from the origin should be told.
    pub(super) fn note_on_distance(distance_m: f64) -> Option<String> {
        (distance_m > FAR_M).then(|| {
            // Of the way between two points at distance d from the origin, the plane takes away about d²/(2R²) along d.
            let share = distance_m * distance_m / (2.0 * 6.371e6 * 6.371e6);
            format!(
                "the path reaches {:.1} km from the origin, where the plane shortens distances by {:.1} parts in a million; --origin nearer avoids it",
                distance_m / 1e3,
                share * 1e6
            )
        })
    }
}

/// Reads `LAT,LON` or `LAT,LON,ALT`.
pub(super) fn parse_origin(text: &str) -> Result<Origin, String> {
    let numbers: Option<Vec<f64>> = text.split(',').map(|number| number.trim().parse().ok()).collect();
    match numbers.as_deref() {
        Some([latitude, longitude]) => Origin::new(*latitude, *longitude, 0.0),
        Some([latitude, longitude, altitude]) => Origin::new(*latitude, *longitude, *altitude),
        _ => Err(format!("{text:?} is not LAT,LON,ALT: degrees, degrees, metres with commas between them")),
    }
}

/// A place in a source, and the site coordinates of all of them: the first one is the origin unless another is given.
///
/// # Errors
/// The places that are too far away.
pub(super) fn all_to_site(
    places: &[(super::track::Place, Origin)],
    origin: Option<Origin>,
    notes: &mut Vec<String>,
) -> Result<(Origin, Vec<(f64, f64)>), Refused> {
    let Some((_, first)) = places.first() else { return Err(Refused::because("no points")) };
    let origin = origin.unwrap_or(*first);
    let mut findings = Vec::new();
    let mut sites = Vec::with_capacity(places.len());
    let mut farthest = 0.0_f64;
    for (place, position) in places {
        match origin.to_site(position) {
            Ok((x_m, y_m)) => {
                farthest = farthest.max(math::length(x_m, y_m));
                sites.push((x_m, y_m));
            }
            Err(what) => findings.push(format!("{place}: {what}")),
        }
    }
    Refused::unless_none(findings)?;
    notes.extend(Origin::note_on_distance(farthest));
    Ok((origin, sites))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The worked example of EPSG method 9837 in IOGP Publication 373-7-2, to its printed millimetre; PROJ gives the same
    /// (`tests/reference/geodesy`).
    #[test]
    fn the_published_example_is_met() {
        let origin = Origin::new(55.0, 5.0, 200.0).unwrap();
        let degrees = |d: f64, m: f64, s: f64| d + m / 60.0 + s / 3600.0;
        let place = Origin::new(degrees(53.0, 48.0, 33.82), degrees(2.0, 7.0, 46.38), 73.0).unwrap();
        for (value, printed) in origin.to_plane(&place).iter().zip([-189_013.869, -128_642.040, -4_220.171]) {
            assert!((value - printed).abs() < 6e-4, "{value} for {printed}");
        }
    }

    #[test]
    fn bounds_name_the_number_and_suspect_swapped_ones() {
        assert_eq!(
            Origin::new(101.0, 5.0, 0.0).unwrap_err(),
            "latitude 101 lies outside ±90°; are latitude and longitude the wrong way round?"
        );
        assert_eq!(Origin::new(1.0, f64::NAN, 0.0).unwrap_err(), "longitude NaN lies outside ±180°");
        assert!(parse_origin("48.1,11.5,520").is_ok());
        assert!(parse_origin("48.1").is_err());
    }

    #[test]
    fn what_lies_too_far_away_is_refused() {
        let origin = Origin::new(48.0, 11.0, 500.0).unwrap();
        let far = Origin::new(48.5, 11.0, 500.0).unwrap();
        assert!(origin.to_site(&far).unwrap_err().starts_with("55.6 km from the origin"));
    }
}
