//! What a person reads: `summary.md` and the figures.
//!
//! Both are built while the cells pass by. [`SummaryBuilder`] keeps counts, the few cells to distrust first, the first
//! rows of the parameter table and a light digest of at most 60 cells for the overview figure, so a million cells cost
//! it no more than a few hundred. Text that comes from the data is made visible and escaped in one place
//! (`text`), so ids with pipes, angle brackets or line breaks cannot break Markdown or SVG.

mod builder;
mod distrust;
pub mod figure;
mod method_text;
mod numbers;
mod read_text;
#[cfg(test)]
mod test_cells;
#[cfg(test)]
mod tests;
mod text;

pub use builder::SummaryBuilder;
pub use numbers::{count_text, estimate_text};
