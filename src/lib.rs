//! Ellbow
#![deny(unsafe_code)]
pub mod base;
pub mod files;
pub mod operator;
pub mod system;
