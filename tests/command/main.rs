//! The command, end to end: messages, exit codes, what is written and what is left alone.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod bad_input;
mod results;
mod support;
