//! Ellbow
#![deny(unsafe_code)]
#![warn(missing_docs)]
pub mod appraise;
pub mod base;
pub mod choose;
pub mod cli;
pub mod files;
pub mod job;
pub mod kernel;
pub mod operator;
pub mod report;
pub mod solve;
pub mod sweep;
pub mod system;
pub mod team;
