//! Matrix Market files: the NIST exchange format (Boisvert, Pozo & Remington, NISTIR 5935, 1996).
//!
//! [`header`] reads banner and size, [`walk`] one piece of entries, [`pass`] the whole text in
//! parallel pieces, [`rows`] the row numbers alone; [`load`] builds the matrix and [`dense`] a vector.

mod dense;
mod header;
mod load;
mod pass;
mod places;
mod quick;
mod rows;
mod walk;

pub use dense::read_dense;
pub use load::read_matrix;

/// Whether a text begins like a Matrix Market file, also one with the faults that are forgiven.
pub fn recognise(text: &[u8]) -> bool {
    let text = text.strip_prefix(header::BYTE_ORDER_MARK).unwrap_or(text).trim_ascii_start();
    let rest = text.strip_prefix(b"%").unwrap_or(text);
    let rest = rest.strip_prefix(b"%").unwrap_or(rest).trim_ascii_start();
    rest.len() < text.len()
        && rest
            .get(..header::NAME.len())
            .is_some_and(|name| name.eq_ignore_ascii_case(header::NAME))
}
