//! Units a table may come in, and the exact powers of ten that lead to s, pA, nS, mV and pF.

/// What a numeric column measures.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Quantity {
    /// Seconds inside the program.
    Time,
    /// pA inside the program.
    Current,
    /// nS inside the program.
    Conductance,
    /// mV inside the program.
    Potential,
    /// pF inside the program.
    Capacitance,
}

/// A power of ten between a unit and the program's own.
///
/// Division and multiplication by an exactly representable power keep the result correctly rounded; multiplying by
/// 1e-3 would not, so 500 ms and 0.5 s would differ in the last bit.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Scale {
    Same,
    Times(f64),
    Over(f64),
}

/// One unit: its symbol and its scale.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Unit {
    /// The symbol in its own case.
    pub symbol: &'static str,
    scale: Scale,
}

impl Unit {
    /// `value` in the program's own unit.
    pub fn convert(self, value: f64) -> f64 {
        match self.scale {
            Scale::Same => value,
            Scale::Times(factor) => value * factor,
            Scale::Over(factor) => value / factor,
        }
    }
}

const fn unit(symbol: &'static str, scale: Scale) -> Unit {
    Unit { symbol, scale }
}

const TIME: &[Unit] = &[
    unit("s", Scale::Same),
    unit("ms", Scale::Over(1e3)),
    unit("us", Scale::Over(1e6)),
];
const CURRENT: &[Unit] = &[
    unit("pA", Scale::Same),
    unit("nA", Scale::Times(1e3)),
    unit("uA", Scale::Times(1e6)),
];
const CONDUCTANCE: &[Unit] = &[
    unit("nS", Scale::Same),
    unit("uS", Scale::Times(1e3)),
    unit("pS", Scale::Over(1e3)),
];
const POTENTIAL: &[Unit] = &[unit("mV", Scale::Same), unit("V", Scale::Times(1e3))];
const CAPACITANCE: &[Unit] = &[
    unit("pF", Scale::Same),
    unit("nF", Scale::Times(1e3)),
    unit("uF", Scale::Times(1e6)),
];

impl Quantity {
    /// Every quantity.
    pub const ALL: [Self; 5] = [
        Self::Time,
        Self::Current,
        Self::Conductance,
        Self::Potential,
        Self::Capacitance,
    ];

    /// The key of `[units]` that sets it.
    pub fn key(self) -> &'static str {
        match self {
            Self::Time => "time",
            Self::Current => "current",
            Self::Conductance => "conductance",
            Self::Potential => "potential",
            Self::Capacitance => "capacitance",
        }
    }

    /// The units it may come in, the program's own first.
    pub fn units(self) -> &'static [Unit] {
        match self {
            Self::Time => TIME,
            Self::Current => CURRENT,
            Self::Conductance => CONDUCTANCE,
            Self::Potential => POTENTIAL,
            Self::Capacitance => CAPACITANCE,
        }
    }

    /// The program's own unit.
    pub fn own(self) -> Unit {
        self.units()[0]
    }

    /// The unit written as `symbol`, case ignored, a micro sign read as `u`.
    pub fn unit(self, symbol: &str) -> Option<Unit> {
        let plain: String = symbol.trim().replace(['\u{b5}', '\u{3bc}'], "u");
        self.units()
            .iter()
            .copied()
            .find(|unit| unit.symbol.eq_ignore_ascii_case(&plain))
    }

    /// The known symbols, for messages: `s, ms, us`.
    pub fn symbols(self) -> String {
        self.units()
            .iter()
            .map(|unit| unit.symbol)
            .collect::<Vec<_>>()
            .join(", ")
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn powers_of_ten_are_exact() {
        let ms = Quantity::Time.unit("MS").unwrap();
        assert_eq!(ms.convert(700.0), 0.7);
        assert_eq!(ms.convert(1_234.5), 1.2345);
        assert_eq!(Quantity::Time.unit("us").unwrap().convert(123_456.0), 0.123456);
        assert_eq!(Quantity::Current.unit("nA").unwrap().convert(0.25), 250.0);
        assert_eq!(Quantity::Current.unit("\u{b5}A").unwrap().convert(2.0), 2e6);
        assert_eq!(Quantity::Conductance.unit("ps").unwrap().convert(1500.0), 1.5);
        assert_eq!(Quantity::Conductance.unit("us").unwrap().convert(0.002), 2.0);
        assert_eq!(Quantity::Potential.unit("v").unwrap().convert(-0.065), -65.0);
        assert_eq!(Quantity::Capacitance.unit("nF").unwrap().convert(0.1), 100.0);
    }

    #[test]
    fn a_unit_of_another_quantity_is_not_known() {
        assert!(Quantity::Time.unit("pA").is_none());
        assert!(Quantity::Time.unit("min").is_none());
        for quantity in Quantity::ALL {
            assert_eq!(quantity.own().convert(1.25), 1.25);
        }
    }
}
