//! Which column plays which part, from UCD and unit, else from the words of its name.
//!
//! A column with a UCD is judged by it alone. Without one, the name is split into words at anything that is no letter or
//! digit and where a capital follows a small letter. The unit must be the one that the role needs, or be absent.

use super::ColumnSeen;

/// What was recognised.
pub struct Guess<'a> {
    pub id: Option<&'a ColumnSeen>,
    pub ra: Option<&'a ColumnSeen>,
    pub dec: Option<&'a ColumnSeen>,
    pub parallax: Option<&'a ColumnSeen>,
    pub parallax_error: Option<&'a ColumnSeen>,
    /// By wavelength when all bands tell it, else as seen.
    pub bands: Vec<BandGuess<'a>>,
    /// Whether the bands are in the order of wavelength.
    pub ordered: bool,
    pub a_v: Option<&'a ColumnSeen>,
    pub goodness: Option<&'a ColumnSeen>,
    /// A string column that names the field of a star.
    pub field: Option<&'a ColumnSeen>,
    /// Sentences about columns that looked right but cannot be used.
    pub remarks: Vec<String>,
}

/// A band with its columns.
pub struct BandGuess<'a> {
    pub name: String,
    pub photometry: Photometry,
    pub column: &'a ColumnSeen,
    pub error: Option<&'a ColumnSeen>,
    /// A_band / A_V and the name of the passband that it stands for.
    pub extinction: Option<(f64, &'static str)>,
    rank: Option<usize>,
    /// Place in the catalogue.
    seen: usize,
}

/// What a band's column holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Photometry {
    Magnitude,
    Flux,
}

/// UCD words of passbands by wavelength, with A_band / A_V where Cardelli, Clayton & Mathis 1989, ApJ 345, 245, Table 3 has
/// it (R_V = 3.1; values from memory, within 0.015 of their formula at the band's wavelength).
const PASSBANDS: [(&str, &str, Option<f64>); 10] = [
    ("em.uv", "UV", None),
    ("em.opt.u", "U", Some(1.569)),
    ("em.opt.b", "B", Some(1.337)),
    ("em.opt.v", "V", Some(1.0)),
    ("em.opt.r", "R", Some(0.751)),
    ("em.opt.i", "I", Some(0.479)),
    ("em.ir.j", "J", Some(0.282)),
    ("em.ir.h", "H", Some(0.190)),
    ("em.ir.k", "K", Some(0.114)),
    ("em.ir.3-4um", "L", Some(0.056)),
];

const ERROR_WORDS: [&str; 12] =
    ["e", "err", "error", "errors", "sd", "se", "sigma", "std", "stddev", "stderr", "unc", "uncertainty"];
/// Words that turn a measured quantity into another one.
const OTHER_WORDS: [&str; 24] = [
    "abs",
    "absmag",
    "absolute",
    "bias",
    "color",
    "colour",
    "corr",
    "correction",
    "count",
    "extinction",
    "flag",
    "limit",
    "model",
    "modelled",
    "n",
    "nobs",
    "over",
    "prior",
    "ratio",
    "snr",
    "true",
    "visits",
    "zero",
    "zp",
];
const PARALLAX_WORDS: [&str; 3] = ["parallax", "plx", "varpi"];

/// A column with its UCD words and the words of its name, all in lower case.
struct Read<'a> {
    column: &'a ColumnSeen,
    ucd: Vec<String>,
    words: Vec<String>,
}

impl<'a> Read<'a> {
    fn of(column: &'a ColumnSeen) -> Self {
        let ucd = column.ucd.as_deref().unwrap_or_default();
        let ucd = ucd.split(';').map(|word| word.trim().to_lowercase()).filter(|word| !word.is_empty()).collect();
        Self { column, ucd, words: words(&column.name) }
    }

    fn main(&self) -> Option<&str> {
        self.ucd.first().map(String::as_str)
    }

    fn ucd_has(&self, word: &str) -> bool {
        self.ucd.iter().any(|w| w == word)
    }

    fn named(&self, any: &[&str]) -> bool {
        self.words.iter().any(|word| any.contains(&word.as_str()))
    }

    /// A standard error, by UCD or name.
    fn is_error(&self) -> bool {
        match self.main() {
            Some(main) => main == "stat.error",
            None => self.named(&ERROR_WORDS),
        }
    }

    /// Has the unit or none.
    fn in_unit(&self, unit: &str) -> bool {
        self.column.unit.as_deref().is_none_or(|u| u.trim().is_empty() || u.trim() == unit)
    }

    /// Words of the name without those that only say "error".
    fn subject(&self) -> Vec<&str> {
        self.words.iter().map(String::as_str).filter(|word| !ERROR_WORDS.contains(word)).collect()
    }

    /// A measured quantity whose UCD starts with `main`, or, without UCD, one of whose words is in `names`.
    fn measures(&self, main: &str, names: &[&str]) -> bool {
        self.column.numeric
            && match self.main() {
                Some(word) => word == main || word.starts_with(&format!("{main}.")),
                None => self.named(names) && !self.named(&ERROR_WORDS) && !self.named(&OTHER_WORDS),
            }
    }
}

impl<'a> Guess<'a> {
    /// Looks at all columns.
    pub fn of(columns: &'a [ColumnSeen]) -> Self {
        let read: Vec<Read<'a>> = columns.iter().map(Read::of).collect();
        let mut remarks = Vec::new();
        let parallax =
            pick(&read, "mas", "columns.parallax", &mut remarks, |c| c.measures("pos.parallax", &PARALLAX_WORDS));
        let parallax_error = pick(&read, "mas", "columns.parallax_error", &mut remarks, |c| {
            c.column.numeric
                && c.is_error()
                && match c.main() {
                    Some(_) => c.ucd.get(1).is_some_and(|word| word.starts_with("pos.parallax")),
                    None => c.named(&PARALLAX_WORDS) && !c.named(&OTHER_WORDS),
                }
        });
        let ra = pick(&read, "deg", "columns.ra", &mut remarks, |c| {
            c.measures("pos.eq.ra", &["ra", "alpha", "raj2000", "ascension"])
        });
        let dec = pick(&read, "deg", "columns.dec", &mut remarks, |c| {
            c.measures("pos.eq.dec", &["dec", "decl", "declination", "delta", "dej2000"])
        });
        let a_v = pick(&read, "mag", "extinction.column", &mut remarks, |c| is_a_v(c));
        let goodness = read.iter().find(|c| {
            c.column.numeric
                && match c.main() {
                    Some(main) => main == "stat.fit.goodness",
                    None => c.named(&["goodness"]) || (c.named(&["fit"]) && c.named(&["quality"])),
                }
        });
        let field = read
            .iter()
            .find(|c| !c.column.numeric && (c.ucd_has("obs.field") || (c.ucd.is_empty() && c.words == ["field"])));
        let (bands, ordered) = bands(&read, &mut remarks);
        Self {
            id: identifier(&read),
            ra,
            dec,
            parallax,
            parallax_error,
            bands,
            ordered,
            a_v,
            goodness: goodness.map(|c| c.column),
            field: field.map(|c| c.column),
            remarks,
        }
    }

    /// Bands that can run as they stand.
    pub fn usable_bands(&self) -> impl Iterator<Item = &BandGuess<'a>> {
        self.bands.iter().filter(|band| band.photometry == Photometry::Magnitude)
    }

    /// The usable band that comes first in the catalogue.
    pub fn first_band(&self) -> Option<&BandGuess<'a>> {
        self.usable_bands().min_by_key(|band| band.seen)
    }
}

/// The best column that fits: measured before modelled, main before others, then as seen. One in another unit is remarked.
fn pick<'a>(
    read: &[Read<'a>],
    unit: &str,
    role: &str,
    remarks: &mut Vec<String>,
    fits: impl Fn(&Read<'a>) -> bool,
) -> Option<&'a ColumnSeen> {
    let fitting: Vec<&Read<'a>> = read.iter().filter(|c| fits(c)).collect();
    let best = |list: &[&Read<'a>]| {
        list.iter().min_by_key(|c| (c.ucd_has("meta.modelled"), !c.ucd_has("meta.main"))).map(|c| c.column)
    };
    let right: Vec<&Read<'a>> = fitting.iter().copied().filter(|c| c.in_unit(unit)).collect();
    let found = best(&right);
    if found.is_none()
        && let Some(column) = best(&fitting)
    {
        let other = column.unit.as_deref().unwrap_or_default();
        remarks.push(format!("{role}: `{}` looks like it, but is in {other}; {unit} is needed.", column.name));
    }
    found
}

fn is_a_v(c: &Read) -> bool {
    let by_name = || {
        let words: Vec<&str> = c.words.iter().map(String::as_str).collect();
        matches!(words[..], ["av"] | ["a", "v"] | ["extinction", "v"] | ["v", "extinction"] | ["extinction"])
    };
    c.column.numeric
        && match c.main() {
            Some("phys.absorption" | "phys.absorption.gal") => {
                c.ucd_has("em.opt.v") || !c.ucd.iter().any(|word| word.starts_with("em."))
            }
            Some(_) => false,
            None => by_name(),
        }
}

fn identifier<'a>(read: &[Read<'a>]) -> Option<&'a ColumnSeen> {
    let rank = |c: &Read| {
        if c.column.float {
            return None;
        }
        match c.main() {
            Some("meta.id") if c.ucd_has("meta.main") => Some(0),
            Some("meta.id") if c.ucd.len() == 1 => Some(1),
            Some(_) => None,
            None => match c.words.iter().map(String::as_str).collect::<Vec<_>>()[..] {
                ["id"] => Some(2),
                ["source" | "star" | "object", "id"] => Some(3),
                ["source" | "star" | "object" | "identifier" | "designation" | "name"] => Some(4),
                [.., "id"] => Some(5),
                [.., "number" | "name"] => Some(6),
                _ => None,
            },
        }
    };
    read.iter().filter_map(|c| rank(c).map(|rank| (rank, c))).min_by_key(|(rank, _)| *rank).map(|(_, c)| c.column)
}

fn bands<'a>(read: &[Read<'a>], remarks: &mut Vec<String>) -> (Vec<BandGuess<'a>>, bool) {
    let mut bands: Vec<BandGuess<'a>> = Vec::new();
    for photometry in [Photometry::Magnitude, Photometry::Flux] {
        for (seen, c) in read.iter().enumerate() {
            if !photometric(c, photometry) {
                continue;
            }
            if photometry == Photometry::Magnitude && !c.in_unit("mag") {
                let unit = c.column.unit.as_deref().unwrap_or_default();
                remarks.push(format!("bands: `{}` looks like a magnitude, but is in {unit}.", c.column.name));
                continue;
            }
            let name = band_name(&c.words);
            // A flux beside a magnitude of the same band is the same measurement.
            if photometry == Photometry::Flux && bands.iter().any(|band| band.name == name) {
                continue;
            }
            let taken = |name: &str| bands.iter().any(|band| band.name == name);
            let name = (1..)
                .map(|i| if i == 1 { name.clone() } else { format!("{name}{i}") })
                .find(|name| !taken(name))
                .unwrap_or(name.clone());
            let passband = passband(c);
            bands.push(BandGuess {
                name,
                photometry,
                column: c.column,
                error: error_of(read, c),
                extinction: passband.and_then(|i| PASSBANDS[i].2.map(|ratio| (ratio, PASSBANDS[i].1))),
                rank: passband,
                seen,
            });
        }
    }
    let ordered = bands.iter().all(|band| band.rank.is_some());
    if ordered {
        bands.sort_by_key(|band| band.rank);
    }
    (bands, ordered)
}

fn photometric(c: &Read, photometry: Photometry) -> bool {
    let (main, also, whole, end) = match photometry {
        Photometry::Magnitude => ("phot.mag", "phot.mag", ["mag", "magnitude"], "mag"),
        Photometry::Flux => ("phot.flux", "phot.flux.density", ["flux", "fluxes"], "flux"),
    };
    let by_name = || {
        let letter = c.words.len() == 1 && c.column.name.len() <= 2 && c.column.unit.as_deref() == Some("mag");
        let ends = c.words.iter().any(|word| word.len() <= 5 && word.ends_with(end));
        (c.named(&whole) || ends || letter) && !c.named(&ERROR_WORDS) && !c.named(&OTHER_WORDS)
    };
    c.column.numeric
        && match c.main() {
            Some(word) => (word == main || word == also) && !c.ucd_has("arith.ratio") && !c.ucd_has("meta.modelled"),
            None => c.column.float && by_name(),
        }
}

fn passband(c: &Read) -> Option<usize> {
    let index = |word: &String| {
        PASSBANDS.iter().position(|band| band.0 == word || (band.1 == "UV" && word.starts_with("em.uv")))
    };
    c.ucd.iter().find_map(index)
}

/// The error of a photometric column: by name, else the only one with the same UCD behind `stat.error`.
fn error_of<'a>(read: &[Read<'a>], of: &Read<'a>) -> Option<&'a ColumnSeen> {
    let subject = of.subject();
    let by_name = read.iter().find(|c| c.column.numeric && c.is_error() && c.subject() == subject);
    if let Some(found) = by_name {
        return Some(found.column);
    }
    let essence = |words: &[String]| -> Vec<String> {
        words.iter().filter(|word| word.starts_with("phot.") || word.starts_with("em.")).cloned().collect()
    };
    let wanted = essence(&of.ucd);
    let same: Vec<&Read<'a>> = read
        .iter()
        .filter(|c| {
            !wanted.is_empty() && c.column.numeric && c.main() == Some("stat.error") && essence(&c.ucd[1..]) == wanted
        })
        .collect();
    if let [only] = same[..] { Some(only.column) } else { None }
}

/// A band's name from the words that are not about magnitudes: capitals when short, letters, digits and `_` only.
fn band_name(words: &[String]) -> String {
    const ABOUT: [&str; 8] = ["mag", "magnitude", "flux", "fluxes", "mean", "phot", "apparent", "band"];
    let mut kept: Vec<&str> = Vec::new();
    for word in words {
        let word = word.as_str();
        let short = ["mag", "flux"].iter().find_map(|end| word.strip_suffix(end)).unwrap_or(word);
        if !ABOUT.contains(&word) && !short.is_empty() {
            kept.push(short);
        }
    }
    let name: String = kept.join("_").chars().filter(|c| c.is_ascii_alphanumeric() || *c == '_').collect();
    match name.len() {
        0 => "M".into(),
        1..=3 => name.to_uppercase(),
        _ => name,
    }
}

/// Words of a name in lower case.
fn words(name: &str) -> Vec<String> {
    let mut words = vec![String::new()];
    let mut small = false;
    for c in name.chars() {
        if !c.is_alphanumeric() {
            words.push(String::new());
        } else {
            if c.is_uppercase() && small {
                words.push(String::new());
            }
            if let Some(word) = words.last_mut() {
                word.extend(c.to_lowercase());
            }
        }
        small = c.is_lowercase();
    }
    words.retain(|word| !word.is_empty());
    words
}
