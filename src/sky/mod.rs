//! PURE. Directions on the sky: unit vectors, galactic and ecliptic axes.
//!
//! Angles in and out are degrees; vectors are unit vectors in ICRS or galactic axes. Functions come from `libm`, so
//! that every machine gives the same bits. Angles outside their range (a declination of 95, say) are not refused here:
//! they go through sine and cosine as they are; NaN gives NaN.

mod rotation;

pub use rotation::{
    ecliptic_latitude, equatorial_to_galactic, galactic_to_equatorial, galactic_to_icrs, icrs_to_galactic,
    sin_ecliptic_latitude,
};

/// Degrees to radians.
pub const RADIANS: f64 = std::f64::consts::PI / 180.0;

/// Unit vector of a longitude and a latitude (deg).
pub fn unit_vector(longitude: f64, latitude: f64) -> [f64; 3] {
    let (sin_lon, cos_lon) = libm::sincos(longitude * RADIANS);
    let (sin_lat, cos_lat) = libm::sincos(latitude * RADIANS);
    [cos_lat * cos_lon, cos_lat * sin_lon, sin_lat]
}

/// Longitude in 0..360 and latitude in -90..90 (deg) of a vector of any length; the longitude at a pole is 0.
///
/// The latitude is taken as atan2(z, sqrt(x^2 + y^2)): an arc sine would lose half the digits near the poles.
pub fn longitude_latitude(v: [f64; 3]) -> (f64, f64) {
    let longitude = libm::atan2(v[1], v[0]) / RADIANS;
    let latitude = libm::atan2(v[2], (v[0] * v[0] + v[1] * v[1]).sqrt()) / RADIANS;
    // A tiny negative angle plus 360 rounds to 360 itself, which is the same direction as 0.
    let wrapped = if longitude < 0.0 { longitude + 360.0 } else { longitude };
    (if wrapped >= 360.0 { 0.0 } else { wrapped }, latitude)
}
