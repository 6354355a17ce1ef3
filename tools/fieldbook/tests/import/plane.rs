//! The local tangent plane against PROJ's: `tests/reference/geodesy/plane.csv`, written by the script beside it.

use super::in_repository;
use fieldbook::import::geographic::Origin;

#[test]
fn the_plane_is_that_of_proj() {
    let text = std::fs::read_to_string(in_repository("tests/reference/geodesy/plane.csv")).unwrap();
    let rows: Vec<Vec<f64>> = text
        .lines()
        .skip(2)
        .map(|line| line.split(',').map(|cell| cell.parse().unwrap()).collect())
        .collect();
    assert_eq!(rows.len(), 21);
    for row in rows {
        let [lat, lon, alt, place_lat, place_lon, place_alt, plane @ ..] = &row[..] else {
            panic!("{row:?}")
        };
        let origin = Origin::new(*lat, *lon, *alt).unwrap();
        let found = origin.to_plane(&Origin::new(*place_lat, *place_lon, *place_alt).unwrap());
        for (found, expected) in found.iter().zip(plane) {
            // Geocentric coordinates have a last bit of a nanometre.
            assert!((found - expected).abs() < 1e-8, "{found} for {expected} in {row:?}");
        }
    }
}
