//! What a column of a result table is: name, type, unit, description, and where its value comes from.

use std::sync::Arc;

use crate::assess::Flag;
use crate::recording::DriveKind;

/// What is known of the whole set before the first row is written.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct TableContext {
    /// The kinds of drive present in the set, each once; none is taken as current.
    pub drive_kinds: Vec<DriveKind>,
    /// Names of the carried-through columns of the cell table, in the order of
    /// [`CellResult::carried`](crate::assess::CellResult::carried).
    pub carried_columns: Vec<String>,
    /// Only `steps.parquet` and `refused.parquet`, without the columns that need a fit.
    pub rates_only: bool,
    /// Whether bootstrap intervals are written.
    pub bootstrap: bool,
}

impl TableContext {
    pub(super) fn has(&self, kind: DriveKind) -> bool {
        self.drive_kinds.contains(&kind) || (kind == DriveKind::Current && self.drive_kinds.is_empty())
    }

    /// The one unit of drive of the set, or `None` where cells differ.
    fn drive_unit(&self) -> Option<&'static str> {
        match (self.has(DriveKind::Current), self.has(DriveKind::Conductance)) {
            (true, true) => None,
            (_, true) => Some(DriveKind::Conductance.unit()),
            _ => Some(DriveKind::Current.unit()),
        }
    }
}

/// The unit of a column.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Unit {
    /// Text and truth values have none.
    None,
    /// A pure number or a count.
    One,
    /// The same in every set.
    Of(&'static str),
    /// That of the cell's drive.
    Drive,
    /// Hz per unit of the cell's drive.
    HzPerDrive,
}

impl Unit {
    /// The symbol for the metadata: empty for text, `1` for pure numbers; for drives the set's unit, or, where its
    /// cells differ, the name of the column that tells each row's.
    pub(super) fn symbol(self, context: &TableContext) -> String {
        match self {
            Self::None => String::new(),
            Self::One => "1".into(),
            Self::Of(symbol) => symbol.into(),
            Self::Drive => context.drive_unit().unwrap_or("drive_unit").into(),
            Self::HzPerDrive => format!("Hz/{}", context.drive_unit().unwrap_or("drive_unit")),
        }
    }
}

/// Which sets a column is written for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum When {
    /// All.
    Always,
    /// Those with cells of this kind of drive.
    Kind(DriveKind),
    /// Those that are fitted.
    Fitted,
    /// Those with bootstrap intervals.
    Bootstrap,
}

impl When {
    pub(super) fn holds(self, context: &TableContext) -> bool {
        match self {
            Self::Always => true,
            Self::Kind(kind) => context.has(kind),
            Self::Fitted => !context.rates_only,
            Self::Bootstrap => context.bootstrap,
        }
    }
}

/// A result table: its name, its columns, and what one row is made from.
pub(super) trait Table: Sized + 'static {
    /// What a row is made from.
    type Row<'a>;
    /// File name without `.parquet`.
    const NAME: &'static str;
    /// The columns, in the order they are written.
    const COLUMNS: &'static [Column<Self>];

    /// Values of the cell table's further columns, where this table carries them.
    fn carried<'a>(_row: &'a Self::Row<'a>) -> Option<&'a [Option<Arc<str>>]> {
        None
    }
    /// Whether this table carries them.
    const CARRIES: bool = false;
}

/// Where a column's value comes from; the variant is the column's type.
pub(super) enum Get<T: Table> {
    Text(for<'a> fn(&'a T::Row<'a>) -> Option<&'a str>),
    Real(for<'a> fn(&'a T::Row<'a>) -> Option<f64>),
    Count(for<'a> fn(&'a T::Row<'a>) -> u64),
    Truth(for<'a> fn(&'a T::Row<'a>) -> bool),
    FlagNames(for<'a> fn(&'a T::Row<'a>) -> &'a [Flag]),
    Reals(for<'a> fn(&'a T::Row<'a>) -> Option<&'a [f64]>),
}

impl<T: Table> Get<T> {
    /// The type in words, for the metadata.
    pub(super) fn type_name(&self) -> &'static str {
        match self {
            Self::Text(_) => "text",
            Self::Real(_) => "real",
            Self::Count(_) => "integer",
            Self::Truth(_) => "boolean",
            Self::FlagNames(_) => "list of text",
            Self::Reals(_) => "list of real",
        }
    }
}

/// One column of a table.
pub(super) struct Column<T: Table> {
    pub(super) name: &'static str,
    pub(super) unit: Unit,
    pub(super) description: &'static str,
    pub(super) when: When,
    pub(super) get: Get<T>,
}

impl<T: Table> Column<T> {
    const fn new(name: &'static str, unit: Unit, description: &'static str, get: Get<T>) -> Self {
        Self {
            name,
            unit,
            description,
            when: When::Always,
            get,
        }
    }

    /// A text column.
    pub(super) const fn text(
        name: &'static str,
        description: &'static str,
        get: for<'a> fn(&'a T::Row<'a>) -> Option<&'a str>,
    ) -> Self {
        Self::new(name, Unit::None, description, Get::Text(get))
    }

    /// A column of real numbers.
    pub(super) const fn real(
        name: &'static str,
        unit: Unit,
        description: &'static str,
        get: for<'a> fn(&'a T::Row<'a>) -> Option<f64>,
    ) -> Self {
        Self::new(name, unit, description, Get::Real(get))
    }

    /// A column of counts.
    pub(super) const fn count(
        name: &'static str,
        description: &'static str,
        get: for<'a> fn(&'a T::Row<'a>) -> u64,
    ) -> Self {
        Self::new(name, Unit::One, description, Get::Count(get))
    }

    /// A column of truth values.
    pub(super) const fn truth(
        name: &'static str,
        description: &'static str,
        get: for<'a> fn(&'a T::Row<'a>) -> bool,
    ) -> Self {
        Self::new(name, Unit::None, description, Get::Truth(get))
    }

    /// A column of lists of flag names.
    pub(super) const fn flag_names(
        name: &'static str,
        description: &'static str,
        get: for<'a> fn(&'a T::Row<'a>) -> &'a [Flag],
    ) -> Self {
        Self::new(name, Unit::None, description, Get::FlagNames(get))
    }

    /// A column of lists of real numbers; a list with a number that is not finite is null as a whole.
    pub(super) const fn reals(
        name: &'static str,
        unit: Unit,
        description: &'static str,
        get: for<'a> fn(&'a T::Row<'a>) -> Option<&'a [f64]>,
    ) -> Self {
        Self::new(name, unit, description, Get::Reals(get))
    }

    /// The same column, written for some sets only.
    pub(super) const fn when(mut self, when: When) -> Self {
        self.when = when;
        self
    }
}
