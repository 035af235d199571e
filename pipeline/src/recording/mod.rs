//! Reading a recording set: files, columns, units, and every rule that refuses a row or a cell.

mod model;

pub use model::*;
