//! Cuts the catalogue into parts, from footers and one number only, so that every machine cuts the same way.

use super::CatalogueFile;

/// A row group of more rows than this is cut into pieces that are decoded and encoded again, so that memory stays
/// bounded; 2 Mi rows of 15 columns decode to about 250 MB.
pub const HUGE_GROUP: u64 = 2_097_152;

/// Rows of the pieces of a huge row group (the last one has what is left).
pub const PIECE_ROWS: u64 = 1_048_576;

/// A row group, or a run of rows of a huge one. It becomes one row group of the release.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Piece {
    /// Position of the file in the catalogue.
    pub file: usize,
    /// Row group in that file.
    pub row_group: usize,
    /// First row, counted in the row group.
    pub first_row: u64,
    /// Rows; never 0.
    pub rows: u64,
    /// Is it the whole row group? Only then can its column chunks be copied undecoded.
    pub whole: bool,
    /// First row, counted in the file.
    pub first_row_in_file: u64,
}

/// One output file: a run of consecutive pieces of one input file.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct PartPlan {
    /// Position among all parts.
    pub index: usize,
    /// Position of the input file in the catalogue.
    pub file: usize,
    /// Its pieces, in row order; never empty.
    pub pieces: Vec<Piece>,
    /// Rows of all pieces.
    pub rows: u64,
    /// `part-00000.parquet` and so on, in catalogue order; more digits when there are more parts, so that names sort.
    pub name: String,
}

impl PartPlan {
    /// Are all pieces whole row groups?
    pub fn whole(&self) -> bool {
        self.pieces.iter().all(|piece| piece.whole)
    }
}

/// A part is closed before the piece that would take it beyond `rows_per_part`; a part of one piece may exceed it.
pub(super) fn cut(files: &[CatalogueFile], rows_per_part: u64, huge: u64, piece_rows: u64) -> Vec<PartPlan> {
    let mut parts: Vec<PartPlan> = Vec::new();
    for (number, file) in files.iter().enumerate() {
        let mut pieces = Vec::new();
        let mut rows = 0;
        for piece in file_pieces(number, file, huge, piece_rows.max(1)) {
            if !pieces.is_empty() && rows + piece.rows > rows_per_part {
                close(&mut parts, number, &mut pieces, &mut rows);
            }
            rows += piece.rows;
            pieces.push(piece);
        }
        if !pieces.is_empty() {
            close(&mut parts, number, &mut pieces, &mut rows);
        }
    }
    let digits = parts.len().saturating_sub(1).to_string().len().max(5);
    for part in &mut parts {
        part.name = format!("part-{:0digits$}.parquet", part.index);
    }
    parts
}

fn close(parts: &mut Vec<PartPlan>, file: usize, pieces: &mut Vec<Piece>, rows: &mut u64) {
    let (pieces, rows) = (std::mem::take(pieces), std::mem::take(rows));
    parts.push(PartPlan { index: parts.len(), file, pieces, rows, name: String::new() });
}

fn file_pieces(file: usize, description: &CatalogueFile, huge: u64, piece_rows: u64) -> impl Iterator<Item = Piece> {
    let mut before = 0;
    let groups = description.groups.iter().enumerate().map(move |(row_group, &rows)| {
        let start = before;
        before += rows;
        (row_group, rows, start)
    });
    groups.flat_map(move |(row_group, rows, start)| {
        let step = if rows > huge { piece_rows } else { rows.max(1) };
        (0..rows.div_ceil(step)).map(move |k| {
            let first_row = k * step;
            let size = step.min(rows - first_row);
            Piece { file, row_group, first_row, rows: size, whole: size == rows, first_row_in_file: start + first_row }
        })
    })
}
