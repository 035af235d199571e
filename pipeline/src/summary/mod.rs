//! What a person reads: `summary.md` and the figures.
//!
//! Both are built while the cells pass by. [`SummaryBuilder`] keeps counts, the few cells to distrust first, the first
//! rows of the parameter table, a light digest of at most 60 cells for the overview figure and of 48 for the page of
//! the contact sheets in work, and 40 bytes of parameters a usable cell. Text that comes from the data is made visible and escaped in one place
//! (`text`), so ids with pipes, angle brackets or line breaks cannot break Markdown or SVG.

mod builder;
mod distrust;
pub mod figure;
mod flag_text;
mod method_text;
mod numbers;
mod population;
mod read_text;
#[cfg(test)]
mod test_cells;
#[cfg(test)]
mod tests;
mod text;

pub use builder::SummaryBuilder;
pub use numbers::{count_text, estimate_text};
