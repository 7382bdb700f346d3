//! A plan proposed from the columns of a catalogue: what a user starts from, not what they end with.
//!
//! Roles are read off UCDs (UCD1+ 1.6) and units (VOUnits) where there are any, else off names (`guess`). What stays open
//! is a commented line that says what is missing, and a sentence in [`Draft::could_not_guess`]. Choices that no column can
//! settle (zero point, prior, limits of cuts) are written out as choices.

mod guess;

use guess::{BandGuess, Guess, Photometry};
use std::fmt::Write;

/// A column of the catalogue as its schema shows it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ColumnSeen {
    /// Name.
    pub name: String,
    /// Type in words, for messages.
    pub kind: String,
    /// Integer, float or decimal.
    pub numeric: bool,
    /// Float.
    pub float: bool,
    /// Unit, when the field metadata has one.
    pub unit: Option<String>,
    /// UCD, when the field metadata has one.
    pub ucd: Option<String>,
    /// Description, when the field metadata has one.
    pub description: Option<String>,
}

/// A proposed plan.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Draft {
    /// Text of the plan; always valid TOML.
    pub toml: String,
    /// One sentence for each thing that the user has to fill in or should look at.
    pub could_not_guess: Vec<String>,
}

/// Proposes a plan for a catalogue with these columns. `catalogue_path` is what the plan will name, relative to itself.
pub fn propose(columns: &[ColumnSeen], catalogue_path: &str) -> Draft {
    let guess = Guess::of(columns);
    let mut draft = Writer { toml: String::new(), open: guess.remarks.clone() };
    draft.release(catalogue_path);
    draft.roles(&guess);
    draft.bands(&guess);
    draft.calibration(&guess);
    draft.cuts(&guess);
    draft.tables(&guess);
    Draft { toml: draft.toml, could_not_guess: draft.open }
}

struct Writer {
    toml: String,
    open: Vec<String>,
}

impl Writer {
    fn line(&mut self, text: impl AsRef<str>) {
        self.toml.push_str(text.as_ref());
        self.toml.push('\n');
    }

    fn open(&mut self, text: String) {
        self.line(format!("# Missing: {text}"));
        self.open.push(text);
    }

    fn release(&mut self, catalogue_path: &str) {
        self.line(
            "# A plan proposed from the columns of the catalogue. Read it through: every value here is a proposal.",
        );
        self.line("\n[release]");
        let last = catalogue_path.trim_end_matches(['/', '\\']).rsplit(['/', '\\']).next().unwrap_or_default();
        let title = if last.is_empty() || last.contains('*') { "Release" } else { last };
        self.line(format!("title = {}", toml_string(title)));
        self.line(format!("catalogue = [{}]   # relative to this file", toml_string(catalogue_path)));
        self.line("output = \"release\"");
        self.line("precision = \"single\"   # or \"double\"");
    }

    fn roles(&mut self, guess: &Guess) {
        self.line("\n[columns]");
        let roles = [
            ("id", guess.id, "the column that identifies a star: an integer or a string"),
            ("ra", guess.ra, "the right ascension in deg (needed only by what looks at the sky)"),
            ("dec", guess.dec, "the declination in deg (needed only by what looks at the sky)"),
            ("parallax", guess.parallax, "the parallax in mas"),
            ("parallax_error", guess.parallax_error, "the standard error of the parallax in mas"),
        ];
        for (role, column, what) in roles {
            match column {
                Some(column) => self.line(format!("{role} = {}", toml_string(&column.name))),
                None => {
                    self.line(format!("# {role} = \"\""));
                    self.open(format!("columns.{role}, {what}."));
                }
            }
        }
    }

    fn bands(&mut self, guess: &Guess) {
        if guess.bands.is_empty() {
            self.line("\n# [bands.NAME]\n# magnitude = \"\"\n# magnitude_error = \"\"");
            self.open("bands, no column of apparent magnitudes or fluxes was recognised.".into());
        }
        for band in &guess.bands {
            self.band(band);
        }
        let usable: Vec<&BandGuess> = guess.usable_bands().collect();
        let pairs: Vec<(&str, &str)> = usable.windows(2).map(|pair| (&*pair[0].name, &*pair[1].name)).collect();
        if pairs.is_empty() {
            self.line("\n# [colours]\n# NAME = [\"BLUER\", \"REDDER\"]");
            self.open("colours, which take two bands with magnitudes.".into());
            return;
        }
        self.line("\n[colours]");
        if !guess.ordered {
            self.line("# The bands do not all say their wavelength: check that the bluer one stands first.");
            self.open.push("colours: the bands do not all say their wavelength; check which one is bluer.".into());
        }
        for (blue, red) in pairs {
            self.line(format!("{blue}_{red} = [\"{blue}\", \"{red}\"]"));
        }
    }

    fn band(&mut self, band: &BandGuess) {
        let flux = band.photometry == Photometry::Flux;
        // A band by flux cannot run before its zero point is known, so all of it waits behind comment signs.
        let mark = if flux { "# " } else { "" };
        let key = if flux { "flux" } else { "magnitude" };
        self.line(format!("\n{mark}[bands.{}]", band.name));
        self.line(format!("{mark}{key} = {}", toml_string(&band.column.name)));
        match band.error {
            Some(error) => self.line(format!("{mark}{key}_error = {}", toml_string(&error.name))),
            None => {
                self.line(format!("# {key}_error = \"\""));
                self.open(format!("bands.{}.{key}_error; without it the band counts as exact.", band.name));
            }
        }
        if flux {
            self.line("# zero_point = 0.0   # magnitude of unit flux\n# system = \"Vega\"   # or \"AB\"");
            self.open(format!(
                "bands.{}.zero_point, the magnitude of unit flux; take the comment signs away when you have it.",
                band.name
            ));
        }
        if let Some((ratio, word)) = band.extinction {
            self.line(format!(
                "{mark}extinction_ratio = {ratio:?}   # A_{} / A_V: mean of band {word}, R_V = 3.1 (Cardelli, Clayton & \
                 Mathis 1989, ApJ 345, 245; from memory, check it)",
                band.name
            ));
        } else {
            self.line("# extinction_ratio = 0.0   # A_band / A_V, needed when extinction is removed");
        }
    }

    fn calibration(&mut self, guess: &Guess) {
        self.line(
            "\n# Subtracted from every parallax. 0 is a choice to make: look for the survey's own study of its zero point.\n\
             [zero_point]\nmodel = \"constant\"\noffset_mas = 0.0",
        );
        self.line(
            "\n# Error as quoted times scale, and floor_mas in quadrature. 1 and 0 take the quoted errors at their word.\n\
             [uncertainty]\nscale = 1.0\nfloor_mas = 0.0",
        );
        self.line("\n[extinction]");
        let lacking: Vec<&str> =
            guess.usable_bands().filter(|band| band.extinction.is_none()).map(|band| &*band.name).collect();
        match guess.a_v {
            Some(column) if lacking.is_empty() => {
                self.line(format!("model = \"column\"\ncolumn = {}   # A_V, mag", toml_string(&column.name)));
            }
            Some(column) => {
                self.line("model = \"none\"");
                self.line(format!("# model = \"column\"\n# column = {}   # A_V, mag", toml_string(&column.name)));
                self.open(format!(
                    "extinction_ratio of {}; then take model \"column\". Until then no extinction is removed.",
                    lacking.join(", ")
                ));
            }
            None => {
                self.line("model = \"none\"\n# model = \"column\"\n# column = \"\"   # A_V, mag");
                self.open("extinction.column, the extinction A_V in mag; without it no extinction is removed.".into());
            }
        }
        self.line(
            "\n# Density of space falling as exp(-d / length) (Bailer-Jones 2015, PASP 127, 994). 1.35 kpc is the value of\n\
             # Astraatmadja & Bailer-Jones 2016, ApJ 833, 119, for a magnitude-limited sky: a choice, and for imprecise\n\
             # parallaxes one that decides the distance.\n\
             [distance]\nprior = \"exponentially-decreasing-density\"\nlength_kpc = 1.35",
        );
    }

    fn cuts(&mut self, guess: &Guess) {
        self.line(
            "\n# A cut names a condition to keep a star. \"flag\" notes a failure, \"drop\" leaves the star out.",
        );
        self.line("[[cuts]]\nname = \"precise\"\nkeep = \"parallax_over_error > 5\"\neffect = \"flag\"");
        if let Some(column) = guess.goodness {
            let keep = toml_string(&format!("{} < 1.4", sql_name(&column.name)));
            self.line(format!(
                "\n# 1.4 is customary for a goodness of fit that is near 1 for good stars: judge it for this catalogue.\n\
                 [[cuts]]\nname = \"well_fitted\"\nkeep = {keep}\neffect = \"flag\""
            ));
        }
    }

    fn tables(&mut self, guess: &Guess) {
        let usable: Vec<&BandGuess> = guess.usable_bands().collect();
        if let [blue, red, ..] = usable[..] {
            // The band that stands first in the catalogue is most often the deepest.
            let band = guess.first_band().map_or(&*red.name, |band| &*band.name);
            self.line(format!(
                "\n[[tables.colour_magnitude]]\ncolour = \"{}_{}\"\nband = \"{band}\"\n\
                 colour_bins = {{ from = -1.0, to = 5.0, step = 0.05 }}\n\
                 magnitude_bins = {{ from = -5.0, to = 17.0, step = 0.1 }}",
                blue.name, red.name
            ));
        }
        if let Some(band) = guess.first_band() {
            let name = &band.name;
            self.line(format!(
                "\n[[tables.magnitude]]\nband = \"{name}\"\nbins = {{ from = 0.0, to = 25.0, step = 0.1 }}\n\n\
                 [[tables.absolute_magnitude]]\nband = \"{name}\"\nbins = {{ from = -6.0, to = 17.0, step = 0.1 }}"
            ));
        }
        if let Some(field) = guess.field {
            let name = sql_name(&field.name);
            let sql = format!(
                "SELECT {name}, COUNT(*) AS stars, AVG(modulus_p50) AS modulus FROM release WHERE accepted GROUP BY {name} \
                 ORDER BY {name}"
            );
            self.line(format!("\n[[tables.query]]\nname = \"by_field\"\nsql = {}", toml_string(&sql)));
        }
    }
}

/// A TOML basic string.
fn toml_string(text: &str) -> String {
    let mut out = String::from("\"");
    for c in text.chars() {
        match c {
            '"' | '\\' => {
                out.push('\\');
                out.push(c);
            }
            '\n' => out.push_str("\\n"),
            '\t' => out.push_str("\\t"),
            c if c.is_control() => {
                // Writing to a string cannot fail.
                let _ = write!(out, "\\u{:04X}", u32::from(c));
            }
            c => out.push(c),
        }
    }
    out.push('"');
    out
}

/// A column name in SQL, quoted unless it is a plain lower-case word that is no keyword.
fn sql_name(name: &str) -> String {
    const KEYWORDS: [&str; 44] = [
        "all", "and", "any", "as", "asc", "between", "by", "case", "cast", "cross", "date", "desc", "distinct", "else",
        "end", "exists", "false", "from", "full", "group", "having", "in", "inner", "interval", "is", "join", "left",
        "like", "limit", "not", "null", "offset", "on", "or", "order", "outer", "right", "select", "then", "time",
        "true", "union", "when", "where",
    ];
    let plain = name.starts_with(|c: char| c.is_ascii_lowercase())
        && name.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '_');
    if plain && !KEYWORDS.contains(&name) { name.to_owned() } else { format!("\"{}\"", name.replace('"', "\"\"")) }
}
