//! Renders records as text. Computes nothing, prints nothing: the caller gets strings.

pub mod inspect;
pub mod page;
pub mod record;
