//! Ellbow
#![deny(unsafe_code)]
pub mod base;
pub mod kernel;
pub mod operator;
pub mod solve;
pub mod system;
