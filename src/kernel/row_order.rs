//! Which row of the file stands where in the tiles.

/// A permutation of rows and its inverse, checked once: threads of a pass write the row of u that an
/// inner row stands for, so no two inner rows may stand for the same one.
#[derive(Debug, Clone, PartialEq)]
pub struct RowOrder {
    row_at: Vec<u32>,
    inner_of: Vec<u32>,
}

impl RowOrder {
    /// From the file row of each inner row.
    ///
    /// # Errors
    /// A row that does not exist, or that comes twice.
    pub fn new(row_at: Vec<u32>) -> Result<Self, &'static str> {
        // No row has this number: there are at most as many as u32 has numbers below it.
        const NONE: u32 = u32::MAX;
        let mut inner_of = vec![NONE; row_at.len()];
        for (inner, &row) in (0u32..NONE).zip(&row_at) {
            match inner_of.get_mut(row as usize) {
                None => return Err("an inner row stands for a row that does not exist"),
                Some(place) if *place != NONE => return Err("two inner rows stand for one row"),
                Some(place) => *place = inner,
            }
        }
        if row_at.len() > NONE as usize {
            return Err("more rows than 32 bits can number");
        }
        Ok(Self { row_at, inner_of })
    }

    /// File row of each inner row.
    pub fn row_at(&self) -> &[u32] {
        &self.row_at
    }

    /// Inner row of each file row.
    pub fn inner_of(&self) -> &[u32] {
        &self.inner_of
    }
}
