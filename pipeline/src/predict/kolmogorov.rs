//! The one-sample Kolmogorov-Smirnov test against the uniform distribution.

/// Samples up to which the distribution of D is computed exactly.
const EXACT: usize = 200;

/// D = largest distance between the empirical distribution of `values` (0 to 1, any order) and the uniform one.
/// `None` for no values, or one that is not between 0 and 1.
pub fn distance_from_uniform(values: &[f64]) -> Option<f64> {
    if values.is_empty() || !values.iter().all(|v| (0.0..=1.0).contains(v)) {
        return None;
    }
    let mut sorted = values.to_vec();
    sorted.sort_by(f64::total_cmp);
    let n = sorted.len() as f64;
    let mut distance = 0.0_f64;
    for (i, v) in sorted.iter().enumerate() {
        distance = distance.max((i + 1) as f64 / n - v).max(v - i as f64 / n);
    }
    Some(distance)
}

/// P(D >= `distance`) for `n` values that are uniform.
///
/// Up to 200 values exactly, by the matrix of Marsaglia, Tsang & Wang (2003, *J. Stat. Softw.* 8(18)), in the tail
/// by twice the one-sided probability of Birnbaum & Tingey (1951), from which it does not differ there (Miller 1956).
/// Above, Kolmogorov's limit with the small-sample correction of Vrbik (2018, *Pioneer J. Theor. Appl. Stat.* 15:15):
/// x = sqrt(n) D becomes x + 1/(6 sqrt n) + (x - 1)/(4 n); within 1e-4 of the exact value there. Not a number for n = 0
/// or a distance that is none.
pub fn p_value(distance: f64, n: usize) -> f64 {
    if n == 0 || distance.is_nan() {
        return f64::NAN;
    }
    let count = n as f64;
    // D is at least 1/(2n) and at most 1.
    if distance <= 0.5 / count {
        return 1.0;
    }
    if distance >= 1.0 {
        return 0.0;
    }
    let p = if n > EXACT {
        let x = count.sqrt() * distance;
        limit(x + 1.0 / (6.0 * count.sqrt()) + (x - 1.0) / (4.0 * count))
    } else if count * distance * distance > 4.0 {
        2.0 * one_sided(distance, n)
    } else {
        1.0 - exact_below(distance, n)
    };
    p.clamp(0.0, 1.0)
}

/// Kolmogorov's limit of P(sqrt(n) D >= x).
fn limit(x: f64) -> f64 {
    if x <= 0.0 {
        return 1.0;
    }
    if x < 1.0 {
        // The other form of the theta function, which converges where the first does not.
        let pi = std::f64::consts::PI;
        let sum: f64 = (0..8)
            .map(|k| {
                let odd = f64::from(2 * k + 1);
                (-odd * odd * pi * pi / (8.0 * x * x)).exp()
            })
            .sum();
        return 1.0 - (2.0 * pi).sqrt() / x * sum;
    }
    let mut sum = 0.0;
    for k in 1..=20 {
        let k_square = f64::from(k * k);
        let sign = if k % 2 == 1 { 1.0 } else { -1.0 };
        sum += sign * (-2.0 * k_square * x * x).exp();
    }
    2.0 * sum
}

/// P(D+ >= d) for n values: d sum_j C(n, j) (d + j/n)^(j-1) (1 - d - j/n)^(n-j) over j <= n (1 - d).
fn one_sided(d: f64, n: usize) -> f64 {
    let count = n as f64;
    let last = ((count * (1.0 - d)).floor() as usize).min(n);
    let mut ln_choose = 0.0;
    let mut sum = 0.0;
    for j in 0..=last {
        let part = j as f64 / count;
        let rest = 1.0 - d - part;
        if rest > 0.0 {
            sum += (ln_choose + (j as f64 - 1.0) * (d + part).ln() + (count - j as f64) * rest.ln()).exp();
        } else if j == n {
            sum += (ln_choose + (j as f64 - 1.0) * (d + part).ln()).exp();
        }
        ln_choose += ((count - j as f64) / (j as f64 + 1.0)).ln();
    }
    d * sum
}

/// P(D < d), exactly: n!/n^n times an entry of the n-th power of a matrix.
fn exact_below(d: f64, n: usize) -> f64 {
    let count = n as f64;
    let k = (count * d).floor() as usize + 1;
    let m = 2 * k - 1;
    let h = k as f64 - count * d;
    let mut matrix = vec![0.0; m * m];
    for i in 0..m {
        for j in 0..m {
            if i + 1 >= j {
                matrix[i * m + j] = 1.0;
            }
        }
    }
    let power = |i: usize| h.powi(i as i32);
    for i in 0..m {
        matrix[i * m] -= power(i + 1);
        matrix[(m - 1) * m + i] -= power(m - i);
    }
    if 2.0 * h - 1.0 > 0.0 {
        matrix[(m - 1) * m] += (2.0 * h - 1.0).powi(m as i32);
    }
    for i in 0..m {
        for j in 0..m {
            if i + 1 > j {
                for g in 1..=(i + 1 - j) {
                    matrix[i * m + j] /= g as f64;
                }
            }
        }
    }
    let (powered, exponent) = matrix_power(&matrix, m, n);
    let mut value = powered[(k - 1) * m + k - 1];
    let mut exponent = f64::from(exponent);
    for i in 1..=n {
        value *= i as f64 / count;
        if value < 1e-140 {
            value *= 1e140;
            exponent -= 140.0;
        }
    }
    value * 10.0_f64.powf(exponent)
}

/// The n-th power of an m by m matrix, with a power of ten taken out.
fn matrix_power(matrix: &[f64], m: usize, n: usize) -> (Vec<f64>, i32) {
    let mut result: Vec<f64> = (0..m * m)
        .map(|i| f64::from(u8::from(i % (m + 1) == 0)))
        .collect();
    let (mut base, mut base_exponent, mut exponent) = (matrix.to_vec(), 0, 0);
    let mut left = n;
    let rescale = |a: &mut Vec<f64>, exponent: &mut i32| {
        if a[(m / 2) * m + m / 2] > 1e140 {
            for x in a.iter_mut() {
                *x *= 1e-140;
            }
            *exponent += 140;
        }
    };
    while left > 0 {
        if left % 2 == 1 {
            result = product(&result, &base, m);
            exponent += base_exponent;
            rescale(&mut result, &mut exponent);
        }
        base = product(&base, &base, m);
        base_exponent *= 2;
        rescale(&mut base, &mut base_exponent);
        left /= 2;
    }
    (result, exponent)
}

fn product(a: &[f64], b: &[f64], m: usize) -> Vec<f64> {
    let mut c = vec![0.0; m * m];
    for i in 0..m {
        for k in 0..m {
            let x = a[i * m + k];
            if x != 0.0 {
                for j in 0..m {
                    c[i * m + j] += x * b[k * m + j];
                }
            }
        }
    }
    c
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn closed_forms_of_small_samples() {
        // n = 1: D = max(u, 1 - u), P(D >= d) = 2 (1 - d).
        for d in [0.5, 0.6, 0.75, 0.99] {
            assert!((p_value(d, 1) - 2.0 * (1.0 - d)).abs() < 1e-13, "{d}");
        }
        // n = 2: P(D < d) = 2 (2d - 1/2)^2 for 1/4 <= d <= 1/2, 1 - 2 (1 - d)^2 above.
        for d in [0.3_f64, 0.4, 0.5] {
            assert!(
                (1.0 - p_value(d, 2) - 2.0 * (2.0 * d - 0.5).powi(2)).abs() < 1e-13,
                "{d}"
            );
        }
        for d in [0.6_f64, 0.9] {
            assert!((p_value(d, 2) - 2.0 * (1.0 - d) * (1.0 - d)).abs() < 1e-13, "{d}");
        }
        // The published check of the matrix method: n = 10, d = 0.274 gives 0.6284796154565043.
        assert!((1.0 - p_value(0.274, 10) - 0.6284796154565043).abs() < 1e-13);
    }

    #[test]
    fn tail_and_limit_join_the_exact_values() {
        for n in [20, 80, 200] {
            let count = n as f64;
            let d = (4.0 / count).sqrt();
            let exact = 1.0 - exact_below(d, n);
            assert!((2.0 * one_sided(d, n) - exact).abs() < 1e-10, "{n}");
        }
        for x in [0.5_f64, 0.8, 1.0, 1.36, 1.63] {
            let d = x / 200.0_f64.sqrt();
            let exact = p_value(d, 200);
            let count = 200.0_f64;
            let corrected = limit(x + 1.0 / (6.0 * count.sqrt()) + (x - 1.0) / (4.0 * count));
            assert!((exact - corrected).abs() < 1e-4, "{x}: {exact} {corrected}");
        }
        // Both forms of the limit, where they meet.
        assert!((limit(1.0 - 1e-12) - limit(1.0)).abs() < 1e-11);
        assert!((limit(1.3581) - 0.05).abs() < 1e-4);
    }

    #[test]
    fn distances() {
        assert_eq!(distance_from_uniform(&[0.5]), Some(0.5));
        assert!((distance_from_uniform(&[0.9, 0.1, 0.5]).unwrap() - 7.0 / 30.0).abs() < 1e-15);
        assert_eq!(distance_from_uniform(&[]), None);
        assert_eq!(distance_from_uniform(&[0.2, 1.2]), None);
        assert_eq!((p_value(0.01, 10), p_value(1.0, 10)), (1.0, 0.0));
        assert!(p_value(0.1, 0).is_nan());
    }
}
