//! Units as the edges write them: VOUnits text (IVOA VOUnits 1.1) with the other spellings that writers use.

/// Unit of an input that may have any unit, a flux whose zero point absorbs it say.
pub const ANY: &str = "*";

/// Other spellings of the units that stages take.
const SPELLINGS: &[(&str, &[&str])] = &[
    ("mas", &["mas", "milliarcsec", "milliarcsecond", "milliarcseconds", "marcsec"]),
    ("mag", &["mag", "mags", "magnitude", "magnitudes", "mag(ab)", "mag(vega)"]),
    ("deg", &["deg", "degree", "degrees", "angle[deg]"]),
    ("", &["", "1", "none", "dimensionless", "-"]),
];

/// Whether a column whose metadata say `stated` can be read where `needed` is meant. Nothing is converted: a factor of
/// 1000 that nobody asked for would be the worst of errors.
pub fn agrees(needed: &str, stated: &str) -> bool {
    let stated = stated.trim().to_lowercase();
    needed == ANY
        || SPELLINGS
            .iter()
            .find(|(unit, _)| *unit == needed)
            .map_or(stated == needed.to_lowercase(), |(_, spellings)| spellings.contains(&stated.as_str()))
}

#[cfg(test)]
mod tests {
    use super::agrees;

    #[test]
    fn spellings_agree_and_other_units_do_not() {
        assert!(agrees("mas", "mas") && agrees("mas", " Milliarcsec "));
        assert!(!agrees("mas", "arcsec") && !agrees("mas", "uarcsec") && !agrees("mag", "mas"));
        assert!(agrees("", "") && !agrees("", "mag"));
        assert!(agrees(super::ANY, "electron.s**-1"));
    }
}
