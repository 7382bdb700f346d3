//! Magnitudes, moduli and the parsec against the outside: IAU 2015 Resolution B2, textbook stars, galaxies with a
//! published distance and modulus, and conversions computed with 40 digits. Values, sources and how sure each is
//! stand in tests/reference; a value from memory is marked there.

use tenparsec::numerics::magnitude::{
    AU_M, F0, L0, PARSEC_M, absolute_magnitude, magnitude_error_from_flux, magnitude_from_flux,
    modulus_from_parallax_mas, modulus_from_parsec, parsec_from_modulus,
};

const CONSTANTS: &str = include_str!("../reference/magnitude_constants.toml");
const VALUES: &str = include_str!("../reference/magnitude_values.csv");
const STARS: &str = include_str!("../reference/textbook_stars.csv");
const GALAXIES: &str = include_str!("../reference/distance_moduli.csv");

/// Rows of a reference table as maps from its header.
fn rows(text: &str) -> Vec<std::collections::HashMap<String, String>> {
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_reader(text.as_bytes());
    reader.deserialize().map(|row| row.expect("reference table parses")).collect()
}

fn number(row: &std::collections::HashMap<String, String>, column: &str) -> f64 {
    row[column].parse().unwrap_or_else(|_| panic!("{column} of {row:?} is no number"))
}

fn constant(key: &str, field: &str) -> f64 {
    let table: toml::Table = CONSTANTS.parse().expect("constants parse");
    table[key][field].as_float().unwrap_or_else(|| panic!("{key}.{field} is no float"))
}

#[track_caller]
fn close(got: f64, expected: f64, tolerance: f64, what: &str) {
    assert!((got - expected).abs() <= tolerance, "{what}: got {got:e}, expected {expected:e} within {tolerance:e}");
}

#[test]
fn constants_are_those_of_the_resolutions() {
    assert_eq!(AU_M, constant("astronomical_unit", "value"));
    assert_eq!(PARSEC_M, constant("parsec", "value"));
    assert_eq!(L0, constant("luminosity_zero", "value"));
    // The resolution prints the first ten digits of an irrational number, cut and not rounded.
    let cut = F0 - constant("irradiance_zero", "value");
    assert!((0.0..1e-17).contains(&cut), "F0 does not begin with the printed digits: {F0:e}");
}

#[test]
fn the_sun_has_its_published_bolometric_magnitudes() {
    let zero = |unit: f64| 2.5 * unit.log10();
    let absolute = magnitude_from_flux(constant("sun_absolute", "luminosity"), zero(L0));
    close(absolute, constant("sun_absolute", "value"), 0.005, "absolute bolometric magnitude of the Sun");
    let apparent = magnitude_from_flux(constant("sun_apparent", "irradiance"), zero(F0));
    close(apparent, constant("sun_apparent", "value"), 0.0005, "apparent bolometric magnitude of the Sun");
    // Both differ by the modulus of one au, but for the rounding of the two nominal values (1361 of 1361.17 W m^-2).
    close(apparent - absolute, modulus_from_parsec(AU_M / PARSEC_M), 4e-4, "difference of the two");
    close(
        modulus_from_parsec(AU_M / PARSEC_M),
        constant("modulus_of_one_au", "value"),
        1e-14 * 32.0,
        "modulus of 1 au",
    );
}

#[test]
fn the_ab_zero_point_is_3631_jansky() {
    // 1 Jy = 1e-23 erg s^-1 cm^-2 Hz^-1, so the magnitude of 1 Jy is 57.5 - 48.60 = 8.90.
    close(magnitude_from_flux(constant("ab_zero_jansky", "value"), 57.5 - 48.6), 0.0, 1e-14 * 57.5, "AB zero point");
}

#[test]
fn textbook_stars_have_their_absolute_magnitudes() {
    let stars = rows(STARS);
    assert_eq!(stars.len(), 18);
    for star in &stars {
        // The table prints four decimals.
        let direct = absolute_magnitude(number(star, "v"), number(star, "parallax_mas"), 0.0);
        close(direct, number(star, "m_v"), 0.5e-4 + 1e-12, &star["star"]);
        let relative = number(star, "parallax_error_mas") / number(star, "parallax_mas");
        close(2.0 * magnitude_error_from_flux(1.0, relative), number(star, "m_v_error"), 0.5e-4 + 1e-12, &star["star"]);
    }
    // Altair as textbooks print it: m 0.77, d 5.15 pc, M 2.21.
    close(0.77 - modulus_from_parsec(5.15), 2.21, 0.005, "Altair");
}

#[test]
fn galaxies_have_the_moduli_printed_with_their_distances() {
    let galaxies = rows(GALAXIES);
    assert_eq!(galaxies.len(), 3);
    for galaxy in &galaxies {
        let (parsec, modulus) = (number(galaxy, "distance_pc"), number(galaxy, "modulus_mag"));
        let rounding = number(galaxy, "half_unit_mag");
        close(modulus_from_parsec(parsec), modulus, rounding, &galaxy["name"]);
        close(modulus_from_parallax_mas(1000.0 / parsec), modulus, rounding, &galaxy["name"]);
        // Common practice: mu = 5 log10(d/pc) - 5 = 5 log10(d/Mpc) + 25.
        close(modulus_from_parsec(parsec), 5.0 * (parsec / 1e6).log10() + 25.0, 1e-13, &galaxy["name"]);
    }
}

#[test]
fn seventeen_minus_minus_four_point_two_is_a_modulus_of_21_2() {
    // Common practice: m = 17 and M = -4.2 give mu = 21.2, d = 173,780 pc.
    let parsec = parsec_from_modulus(17.0 - -4.2);
    close(parsec, 173_780.0828749375, 1e-8, "distance");
    close(modulus_from_parsec(parsec), 21.2, 1e-14 * 22.0, "modulus");
    close(absolute_magnitude(17.0, 1000.0 / parsec, 0.0), -4.2, 1e-14 * 22.0, "absolute magnitude");
}

#[test]
fn conversions_agree_with_forty_digits() {
    let values = rows(VALUES);
    assert_eq!(values.len(), 40);
    for row in &values {
        let n = |column: &str| number(row, column);
        let expected = n("value");
        let (got, scale) = match row["kind"].as_str() {
            "modulus_from_parsec" => (modulus_from_parsec(n("a")), 50.0),
            "modulus_from_parallax_mas" => (modulus_from_parallax_mas(n("a")), 50.0),
            "absolute_magnitude" => (absolute_magnitude(n("a"), n("b"), n("c")), 50.0),
            "magnitude_from_flux" => (magnitude_from_flux(n("a"), n("b")), 50.0),
            "magnitude_error_from_flux" => (magnitude_error_from_flux(n("a"), n("b")), expected),
            // An error of one rounding in the modulus is one of 0.46 times it, relative, in the distance.
            "parsec_from_modulus" => (parsec_from_modulus(n("a")), 10.0 * expected),
            other => panic!("no such conversion: {other}"),
        };
        // A few roundings of the largest number on the way: 4 eps.
        close(got, expected, 4.0 * f64::EPSILON * scale, &format!("{row:?}"));
    }
}

#[test]
fn distance_and_modulus_invert_each_other() {
    for step in 0..=2000 {
        let modulus = -32.0 + 0.04 * f64::from(step);
        let parsec = parsec_from_modulus(modulus);
        close(modulus_from_parsec(parsec), modulus, 2e-14, "there and back");
        close(modulus_from_parallax_mas(1000.0 / parsec), modulus, 4e-14, "through the parallax");
    }
}

#[test]
fn what_does_not_exist_is_nan() {
    let absent = [f64::NAN, f64::INFINITY, f64::NEG_INFINITY];
    let not_positive = [0.0, -0.0, -1e-300, -3.2];
    for bad in absent.into_iter().chain(not_positive) {
        assert!(modulus_from_parsec(bad).is_nan(), "modulus of {bad} pc");
        assert!(modulus_from_parallax_mas(bad).is_nan(), "modulus of {bad} mas");
        assert!(absolute_magnitude(5.0, bad, 0.0).is_nan(), "absolute magnitude at {bad} mas");
        assert!(magnitude_from_flux(bad, 25.0).is_nan(), "magnitude of flux {bad}");
        assert!(magnitude_error_from_flux(bad, 1.0).is_nan(), "error of flux {bad}");
    }
    for bad in absent {
        assert!(parsec_from_modulus(bad).is_nan(), "distance of modulus {bad}");
        assert!(absolute_magnitude(bad, 10.0, 0.0).is_nan(), "magnitude {bad}");
        assert!(absolute_magnitude(5.0, 10.0, bad).is_nan(), "extinction {bad}");
        assert!(magnitude_from_flux(1.0, bad).is_nan(), "zero point {bad}");
        assert!(magnitude_error_from_flux(1.0, bad).is_nan(), "flux error {bad}");
    }
    assert!(magnitude_error_from_flux(1.0, -0.1).is_nan());
    assert_eq!(magnitude_error_from_flux(1.0, 0.0), 0.0);
    assert!(parsec_from_modulus(2000.0).is_nan() && parsec_from_modulus(-2000.0).is_nan());
}
