//! Checks against the world outside this project, a module a subject. Sources stand beside each and, for the files,
//! in the README of their folder in `fixtures/`.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]
// `!(error <= limit)` is meant: it also catches what is not a number.
#![allow(clippy::neg_cmp_op_on_partial_ord)]

mod adaptation;
mod bootstrap;
mod effective_threshold;
mod extra_variance;
mod goodness;
mod hyperbola;
mod integrate_and_fire;
mod intervals;
mod nist;
mod recovery;
mod referee;
mod rivals;
mod smoothed_hyperbola;
mod support;
