//! Rotation between ICRS and galactic axes, and latitude on the ecliptic.
//!
//! Galactic axes: pole at ra 192.85948, dec +27.12825, ascending node of the plane at galactic longitude 32.93192 deg
//! (The Hipparcos and Tycho Catalogues, ESA SP-1200, 1997, vol. 1, section 1.5.3, which fixes the IAU system of
//! 1958 - Blaauw et al. 1960, MNRAS 121, 123 - in ICRS by definition). The matrix below is worked out from these three
//! angles to double precision; SP-1200 prints it to ten digits.
//!
//! Ecliptic: obliquity 84381.406 arcsec at J2000 (IAU 2006 Resolution B1; Capitaine, Wallace & Chapront 2003, A&A 412,
//! 567). ICRS is taken as the mean equator of J2000: the frame bias, 0.02 arcsec, is far below what a latitude is used
//! for here.

use super::{longitude_latitude, unit_vector};

/// Rows: the galactic axes (centre, l = 90, pole) in ICRS.
const GALACTIC: [[f64; 3]; 3] = [
    [-0.054_875_560_416_215_37, -0.873_437_090_234_885, -0.483_835_015_548_713_2],
    [0.494_109_427_875_583_7, -0.444_829_629_960_011_2, 0.746_982_244_497_218_8],
    [-0.867_666_149_019_004_7, -0.198_076_373_431_201_5, 0.455_983_776_175_066_9],
];

/// Sine and cosine of the obliquity, 84381.406 arcsec.
const SIN_OBLIQUITY: f64 = 0.397_776_969_112_606;
const COS_OBLIQUITY: f64 = 0.917_482_143_065_241_8;

/// A vector in ICRS axes expressed in galactic axes.
pub fn icrs_to_galactic(v: [f64; 3]) -> [f64; 3] {
    let row = |r: &[f64; 3]| r[0] * v[0] + r[1] * v[1] + r[2] * v[2];
    [row(&GALACTIC[0]), row(&GALACTIC[1]), row(&GALACTIC[2])]
}

/// A vector in galactic axes expressed in ICRS axes.
pub fn galactic_to_icrs(v: [f64; 3]) -> [f64; 3] {
    let column = |j: usize| GALACTIC[0][j] * v[0] + GALACTIC[1][j] * v[1] + GALACTIC[2][j] * v[2];
    [column(0), column(1), column(2)]
}

/// Galactic longitude and latitude (deg) of an ICRS right ascension and declination (deg).
pub fn equatorial_to_galactic(ra: f64, dec: f64) -> (f64, f64) {
    longitude_latitude(icrs_to_galactic(unit_vector(ra, dec)))
}

/// ICRS right ascension and declination (deg) of a galactic longitude and latitude (deg).
pub fn galactic_to_equatorial(l: f64, b: f64) -> (f64, f64) {
    longitude_latitude(galactic_to_icrs(unit_vector(l, b)))
}

/// Sine of the ecliptic latitude of an ICRS unit vector.
pub fn sin_ecliptic_latitude(v: [f64; 3]) -> f64 {
    COS_OBLIQUITY * v[2] - SIN_OBLIQUITY * v[1]
}

/// Ecliptic latitude (deg) of an ICRS right ascension and declination (deg).
pub fn ecliptic_latitude(ra: f64, dec: f64) -> f64 {
    let v = unit_vector(ra, dec);
    let y = COS_OBLIQUITY * v[1] + SIN_OBLIQUITY * v[2];
    longitude_latitude([v[0], y, sin_ecliptic_latitude(v)]).1
}
