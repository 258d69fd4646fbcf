//! What a reconstruction is worth: how well it fits.

pub mod misfit;
