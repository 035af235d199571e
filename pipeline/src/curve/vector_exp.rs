//! The exponential function in a form the compiler turns into vector code.
//!
//! `f64::exp` is a call per value; a quadrature needs dozens at once. This one has no branch and no call, so a loop
//! over an array of values runs as many lanes as the machine has, and gives the same bits on every machine, since
//! every operation is an addition, a multiplication or a fused pair of them (`mul_add`, correctly rounded wherever it
//! runs), in a fixed order.

/// Adding this to a number of moderate size rounds it to an integer, which then stands in the lowest bits.
const ROUNDER: f64 = 6_755_399_441_055_744.0; // 1.5 * 2^52
const LN_2_HIGH: f64 = 0.693_147_180_369_123_8;
const LN_2_LOW: f64 = 1.908_214_929_270_587_7e-10;

/// exp(x) for -700 <= x <= 700, relative error below 1e-14; arguments below -700 give exp(-700).
#[inline(always)]
pub fn exp(x: f64) -> f64 {
    let x = if x < -700.0 { -700.0 } else { x };
    let rounded = x.mul_add(std::f64::consts::LOG2_E, ROUNDER);
    let k = rounded - ROUNDER;
    let r = (-k).mul_add(LN_2_LOW, (-k).mul_add(LN_2_HIGH, x));
    let p = r.mul_add(growth(r), 1.0);
    f64::from_bits(p.to_bits().wrapping_add(rounded.to_bits() << 52))
}

/// (exp(r) - 1)/r for |r| <= 0.35, relative error below 1e-14: its Taylor polynomial of degree 11.
#[inline(always)]
pub fn growth(r: f64) -> f64 {
    // Estrin's scheme: pairs first, so that the additions do not wait for each other.
    let r2 = r * r;
    let r4 = r2 * r2;
    let pair = |even: f64, odd: f64| r.mul_add(odd, even);
    let a = r2.mul_add(pair(1.0 / 6.0, 1.0 / 24.0), pair(1.0, 1.0 / 2.0));
    let b = r2.mul_add(pair(1.0 / 5040.0, 1.0 / 40_320.0), pair(1.0 / 120.0, 1.0 / 720.0));
    let c = r2.mul_add(
        pair(1.0 / 39_916_800.0, 1.0 / 479_001_600.0),
        pair(1.0 / 362_880.0, 1.0 / 3_628_800.0),
    );
    r4.mul_add(r4.mul_add(c, b), a)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn agrees_with_the_standard_library() {
        for i in -700_000..700_000 {
            let x = f64::from(i) * 1e-3 + 1.7e-4;
            let x = x.min(700.0);
            assert!(
                (exp(x) / x.exp() - 1.0).abs() < 1e-14,
                "{x}: {} {}",
                exp(x),
                x.exp()
            );
        }
        for i in -3500..3500 {
            let r = f64::from(i) * 1e-4 + 3.3e-5;
            assert!((growth(r) * r / r.exp_m1() - 1.0).abs() < 1e-14, "{r}");
        }
        assert_eq!(exp(0.0), 1.0);
        assert_eq!(exp(-1e9), exp(-700.0));
    }
}
