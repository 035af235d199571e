//! Nodes and weights of Gauss-Legendre and Gauss-Hermite rules, by Newton's method on the orthogonal polynomials
//! (Abramowitz & Stegun 1964, sections 25.4.29 and 25.4.46), good to the last digit or two.

use std::f64::consts::PI;

/// A rule of `N` nodes with the weights that belong to them.
#[derive(Clone, Copy, Debug)]
pub struct Rule<const N: usize> {
    /// Nodes, ascending.
    pub nodes: [f64; N],
    /// Weights.
    pub weights: [f64; N],
}

/// Gauss-Legendre on [0, 1]: the weights sum to 1.
pub fn legendre<const N: usize>() -> Rule<N> {
    let mut rule = Rule {
        nodes: [0.0; N],
        weights: [0.0; N],
    };
    for i in 0..N.div_ceil(2) {
        // Tricomi's first guess; Newton doubles its digits at every turn.
        let mut x = (PI * (i as f64 + 0.75) / (N as f64 + 0.5)).cos();
        let mut slope = 1.0;
        for _ in 0..6 {
            let (value, derivative) = legendre_polynomial(N, x);
            slope = derivative;
            x -= value / derivative;
        }
        let weight = 2.0 / ((1.0 - x * x) * slope * slope);
        rule.nodes[i] = 0.5 * (1.0 - x);
        rule.nodes[N - 1 - i] = 0.5 * (1.0 + x);
        rule.weights[i] = 0.5 * weight;
        rule.weights[N - 1 - i] = 0.5 * weight;
    }
    rule
}

/// P_n(x) and its derivative by the three-term recurrence.
fn legendre_polynomial(n: usize, x: f64) -> (f64, f64) {
    let (mut before, mut value) = (1.0, x);
    for k in 2..=n {
        let k = k as f64;
        (before, value) = (value, ((2.0 * k - 1.0) * x * value - (k - 1.0) * before) / k);
    }
    (value, n as f64 * (x * value - before) / (x * x - 1.0))
}

/// Gauss-Hermite for the standard normal weight: sum w_i g(x_i) ~ E[g(X)], X ~ N(0, 1); the weights sum to 1.
pub fn hermite<const N: usize>() -> Rule<N> {
    let mut rule = Rule {
        nodes: [0.0; N],
        weights: [0.0; N],
    };
    let bound = (4.0 * N as f64 + 2.0).sqrt();
    // The roots of He_N interlace and are well apart: walk down from the bound and polish every sign change.
    let steps = 400 * N;
    let mut found = 0;
    let mut right = bound;
    let mut at_right = hermite_function(N, right).0;
    for k in 1..=steps {
        let left = bound - 2.0 * bound * k as f64 / steps as f64;
        let at_left = hermite_function(N, left).0;
        if at_left * at_right < 0.0 && found < N {
            let mut x = 0.5 * (left + right);
            for _ in 0..8 {
                let (value, below) = hermite_function(N, x);
                // He_N' = N He_(N-1); in normalised functions the factor is sqrt(N).
                x -= value / ((N as f64).sqrt() * below);
            }
            let below = hermite_function(N, x).1;
            rule.nodes[N - 1 - found] = x;
            rule.weights[N - 1 - found] = 1.0 / (N as f64 * below * below);
            found += 1;
        }
        right = left;
        at_right = at_left;
    }
    rule
}

/// Orthonormal probabilists' Hermite polynomials of degree n and n - 1 at x.
fn hermite_function(n: usize, x: f64) -> (f64, f64) {
    let (mut before, mut value) = (0.0, 1.0);
    for k in 0..n {
        let next = (x * value - (k as f64).sqrt() * before) / ((k + 1) as f64).sqrt();
        (before, value) = (value, next);
    }
    (value, before)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn legendre_integrates_polynomials_to_degree_2n_minus_1() {
        let rule = legendre::<24>();
        for power in 0..48 {
            let sum: f64 = rule
                .nodes
                .iter()
                .zip(rule.weights)
                .map(|(x, w)| w * x.powi(power))
                .sum();
            assert!(
                (sum * f64::from(power + 1) - 1.0).abs() < 1e-14,
                "x^{power}: {sum}"
            );
        }
        let sum: f64 = rule
            .nodes
            .iter()
            .zip(rule.weights)
            .map(|(x, w)| w * x.powi(48))
            .sum();
        assert!(sum * 49.0 != 1.0);
    }

    #[test]
    fn hermite_gives_the_moments_of_the_normal() {
        let rule = hermite::<24>();
        let mut moment = 1.0;
        for half in 0..12 {
            let sum: f64 = rule
                .nodes
                .iter()
                .zip(rule.weights)
                .map(|(x, w)| w * x.powi(2 * half))
                .sum();
            assert!(
                (sum / moment - 1.0).abs() < 2e-14,
                "E X^{}: {sum} not {moment}",
                2 * half
            );
            moment *= f64::from(2 * half + 1);
        }
    }
}
