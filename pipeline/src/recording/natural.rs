//! Natural order of names: runs of digits compare by value, so that cell 9 comes before cell 10.

use std::cmp::Ordering;

/// Compares two names; a total order, equal only for identical names.
///
/// Digits compare by value, everything else byte by byte (which for UTF-8 is the order of code points); names equal
/// in that sense, such as `7` and `007`, are told apart by their bytes.
pub fn natural(a: &str, b: &str) -> Ordering {
    let (x, y) = (a.as_bytes(), b.as_bytes());
    let (mut i, mut j) = (0, 0);
    while i < x.len() && j < y.len() {
        if x[i].is_ascii_digit() && y[j].is_ascii_digit() {
            let (run_x, run_y) = (digits(&x[i..]), digits(&y[j..]));
            let (value_x, value_y) = (without_zeros(run_x), without_zeros(run_y));
            let order = value_x
                .len()
                .cmp(&value_y.len())
                .then_with(|| value_x.cmp(value_y));
            if order != Ordering::Equal {
                return order;
            }
            i += run_x.len();
            j += run_y.len();
        } else if x[i] != y[j] {
            return x[i].cmp(&y[j]);
        } else {
            i += 1;
            j += 1;
        }
    }
    (x.len() - i).cmp(&(y.len() - j)).then_with(|| a.cmp(b))
}

fn digits(bytes: &[u8]) -> &[u8] {
    let end = bytes
        .iter()
        .position(|b| !b.is_ascii_digit())
        .unwrap_or(bytes.len());
    &bytes[..end]
}

fn without_zeros(digits: &[u8]) -> &[u8] {
    let start = digits.iter().position(|&b| b != b'0').unwrap_or(digits.len());
    &digits[start..]
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn numbers_by_value() {
        let mut names = [
            "c10",
            "c9",
            "c1",
            "10",
            "9",
            "c1b",
            "c1a",
            "",
            "007",
            "7",
            "99999999999999999999999",
        ];
        names.sort_by(|a, b| natural(a, b));
        assert_eq!(
            names,
            [
                "",
                "007",
                "7",
                "9",
                "10",
                "99999999999999999999999",
                "c1",
                "c1a",
                "c1b",
                "c9",
                "c10"
            ]
        );
    }

    proptest! {
        #[test]
        fn is_a_total_order(a in "[ab0-2é]{0,6}", b in "[ab0-2é]{0,6}", c in "[ab0-2é]{0,6}") {
            prop_assert_eq!(natural(&a, &b), natural(&b, &a).reverse());
            prop_assert_eq!(natural(&a, &b) == Ordering::Equal, a == b);
            if natural(&a, &b) != Ordering::Greater && natural(&b, &c) != Ordering::Greater {
                prop_assert_ne!(natural(&a, &c), Ordering::Greater);
            }
        }
    }
}
