//! Ellbow
#![deny(unsafe_code)]
pub mod base;
pub mod choose;
pub mod kernel;
pub mod operator;
pub mod solve;
pub mod sweep;
pub mod system;
