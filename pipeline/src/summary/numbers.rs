//! Numbers as a person reads them: as many digits as the uncertainty supports.

use crate::fit::Estimate;

/// A count with commas between thousands.
pub fn count_text(count: u64) -> String {
    let digits = count.to_string();
    let mut text = String::with_capacity(digits.len() + digits.len() / 3);
    for (i, digit) in digits.chars().enumerate() {
        if i > 0 && (digits.len() - i).is_multiple_of(3) {
            text.push(',');
        }
        text.push(digit);
    }
    text
}

/// Decimals that show `significant` digits of a number of this size.
fn decimals(size: f64, significant: i32) -> usize {
    if !(size > 0.0 && size.is_finite()) {
        return 0;
    }
    // Bounded by what an f64 can hold, so the conversion cannot wrap.
    (significant - 1 - size.log10().floor() as i32).clamp(0, 15) as usize
}

/// A number with fixed decimals, or in powers of ten where that would be unreadable; never `-0`.
fn fixed(value: f64, decimals: usize) -> String {
    if !value.is_finite() {
        return "not determined".into();
    }
    let size = value.abs();
    if size >= 1e7 || (size > 0.0 && size < 1e-4) {
        return format!("{value:.2e}");
    }
    let text = format!("{value:.decimals$}");
    match text.strip_prefix('-') {
        Some(rest) if rest.chars().all(|c| c == '0' || c == '.') => rest.to_string(),
        _ => text,
    }
}

/// A number with three significant digits, whole numbers in full.
pub(super) fn significant_text(value: f64) -> String {
    fixed(value, decimals(value.abs(), 3))
}

fn bound_text(bound: Option<f64>, value: f64, shared: usize) -> String {
    match bound {
        Some(f64::INFINITY) => "no upper bound".into(),
        Some(f64::NEG_INFINITY) => "no lower bound".into(),
        // Far from the value the value's decimals would be noise.
        Some(bound) if bound.abs() > 10.0 * value.abs() => fixed(bound, decimals(bound.abs(), 3)),
        Some(bound) => fixed(bound, shared),
        None => "not determined".into(),
    }
}

/// Value with its 95 % interval, `103 (96 to 112)`; two digits of the interval's width are shown.
///
/// Without interval the standard error stands instead, `103 (SE 4.1)`. A value that is not estimated is
/// `not determined`, with the bounds that are; an infinite bound is `no upper bound` or `no lower bound`.
pub fn estimate_text(estimate: &Estimate) -> String {
    let finite = |number: Option<f64>| number.filter(|n| n.is_finite());
    let Some(value) = finite(estimate.value) else {
        return match (finite(estimate.lo), finite(estimate.hi)) {
            (Some(lo), Some(hi)) => {
                let shared = decimals(hi - lo, 2);
                format!("not determined ({} to {})", fixed(lo, shared), fixed(hi, shared))
            }
            (Some(lo), None) => {
                let open = if estimate.hi == Some(f64::INFINITY) {
                    ", no upper bound"
                } else {
                    ""
                };
                format!("not determined (above {}{open})", significant_text(lo))
            }
            (None, Some(hi)) => {
                let open = if estimate.lo == Some(f64::NEG_INFINITY) {
                    ", no lower bound"
                } else {
                    ""
                };
                format!("not determined (below {}{open})", significant_text(hi))
            }
            (None, None) => "not determined".into(),
        };
    };
    let se = finite(estimate.se).filter(|se| *se > 0.0);
    let width = match (finite(estimate.lo), finite(estimate.hi)) {
        (Some(lo), Some(hi)) if hi > lo => Some(hi - lo),
        _ => se.map(|se| 4.0 * se),
    };
    let shared = match width {
        Some(width) => decimals(width, 2)
            .max(decimals(value.abs(), 2))
            .min(decimals(value.abs(), 6)),
        None => decimals(value.abs(), 3),
    };
    match (estimate.lo, estimate.hi) {
        (None, None) => match se {
            Some(se) => format!("{} (SE {})", fixed(value, shared), fixed(se, decimals(se, 2))),
            None => format!("{} (interval not determined)", fixed(value, shared)),
        },
        (lo, hi) => format!(
            "{} ({} to {})",
            fixed(value, shared),
            bound_text(lo, value, shared),
            bound_text(hi, value, shared)
        ),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn of(value: Option<f64>, se: Option<f64>, lo: Option<f64>, hi: Option<f64>) -> String {
        estimate_text(&Estimate { value, se, lo, hi })
    }

    #[test]
    fn counts_have_commas() {
        assert_eq!(count_text(0), "0");
        assert_eq!(count_text(999), "999");
        assert_eq!(count_text(1000), "1,000");
        assert_eq!(count_text(12_345_678), "12,345,678");
    }

    #[test]
    fn estimates_show_the_digits_their_interval_supports() {
        let inf = f64::INFINITY;
        assert_eq!(
            of(Some(103.21), Some(4.0), Some(95.6), Some(112.4)),
            "103 (96 to 112)"
        );
        assert_eq!(
            of(Some(4.567), Some(0.1), Some(4.36), Some(4.81)),
            "4.57 (4.36 to 4.81)"
        );
        assert_eq!(
            of(Some(-0.001), None, Some(-21.0), Some(17.0)),
            "-0.0010 (-21.0 to 17.0)"
        );
        assert_eq!(
            of(Some(103.0), Some(4.0), Some(96.0), Some(inf)),
            "103 (96 to no upper bound)"
        );
        assert_eq!(
            of(Some(50.0), Some(4.0), Some(-inf), Some(61.0)),
            "50 (no lower bound to 61)"
        );
        assert_eq!(
            of(None, None, Some(85.3), Some(inf)),
            "not determined (above 85.3, no upper bound)"
        );
        assert_eq!(of(None, None, None, None), "not determined");
        assert_eq!(of(Some(103.2), Some(4.07), None, None), "103 (SE 4.1)");
        assert_eq!(of(Some(103.2), None, None, None), "103 (interval not determined)");
        assert_eq!(
            of(Some(103.2), None, Some(96.2), None),
            "103 (96.2 to not determined)".replace("96.2", "96")
        );
        assert_eq!(of(Some(f64::NAN), None, None, None), "not determined");
        assert_eq!(
            of(Some(0.5), None, Some(0.3), Some(5123.0)),
            "0.50 (0.30 to 5123)"
        );
        assert_eq!(
            of(Some(1.0e9), None, Some(0.9e9), Some(1.2e9)),
            "1.00e9 (9.00e8 to 1.20e9)"
        );
    }

    #[test]
    fn no_negative_zero() {
        assert_eq!(fixed(-0.004, 1), "0.0");
        assert_eq!(fixed(-0.0, 0), "0");
        assert_eq!(significant_text(0.0), "0");
        assert_eq!(significant_text(1234.5), "1234");
    }
}
