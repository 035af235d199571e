//! From rates to a rate function: objective, solver, extra SD, profiles.

pub mod solver;
