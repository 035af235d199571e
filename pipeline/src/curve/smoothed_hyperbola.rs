//! The saturating hyperbola with Gaussian input noise averaged in, in standard form.
//!
//! ```text
//! h(z, s) = E[H(z + s X)],  H(u) = u/(1+u) for u > 0 and 0 otherwise,  X ~ N(0, 1)
//! rate    = max_rate * h((drive - threshold)/half_rise, noise_sd/half_rise)
//! ```
//!
//! H is the rectangular hyperbola (Michaelis & Menten 1913; for rates Naka & Rushton 1966 with exponent 1). With
//! p(u) the density of N(z, s^2) and p0 = p(0), everything is an integral over u > 0 (derivatives of H in the sense
//! of distributions):
//!
//! ```text
//! h      = int u/(1+u) p du            dh/dz = int (1+u)^-2 p du
//! bend   = int u/(1+u)^2 p du          = z dh/dz + s dh/ds: minus the derivative by ln half_rise
//! excess = int u^2/(1+u)^2 p du        = h - bend
//! d2h/dz2 = p0 - 2 int (1+u)^-3 p du   dh/ds = s d2h/dz2 (heat equation)
//! ```
//!
//! The substitution t = ln(1+u) moves the pole at u = -1 to infinity, after which one Gauss-Legendre panel over the
//! part of u > 0 that matters is accurate to rounding. Far above the threshold (z/s > 10) the kink is out of reach
//! of the noise and Gauss-Hermite nodes do. Two evaluations are offered: [`evaluate`] with 80 nodes, the referee, and
//! [`Kernel`], made once per `s` and used by the fit, with as few nodes as keep 1e-11.

use std::f64::consts::PI;
use std::sync::LazyLock;

use super::quadrature::{Rule, hermite, legendre};
use super::vector_exp;

/// Value and derivatives of h at one (z, s). All dimensionless.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Smoothed {
    /// h(z, s), between 0 and 1.
    pub h: f64,
    /// dh/dz.
    pub dh_dz: f64,
    /// dh/ds.
    pub dh_ds: f64,
    /// d2h/dz2.
    pub d2h_dz2: f64,
    /// z dh/dz + s dh/ds, computed without cancellation.
    pub bend: f64,
    /// h - bend, computed without cancellation.
    pub excess: f64,
}

/// Below this z/s the density at zero underflows and everything is zero.
const LOWEST_W: f64 = -38.5;

static LEGENDRE_80: LazyLock<Rule<80>> = LazyLock::new(legendre::<80>);
static HERMITE_24: LazyLock<Rule<24>> = LazyLock::new(hermite::<24>);

/// phi(w)/s at w = z/s, with the exponent in two pieces so that the far tail keeps its digits.
fn density_at_zero(z: f64, s: f64) -> f64 {
    let w = z / s;
    // z = w s + remainder exactly, so (z/s)^2/2 = w^2/2 + w remainder/s to more than double precision.
    let remainder = (-w).mul_add(s, z) / s;
    let high = w * w;
    let low = w.mul_add(w, -high) + 2.0 * w * remainder;
    (-0.5 * high).exp() * (1.0 - 0.5 * low) / (s * (2.0 * PI).sqrt())
}

/// h and its derivatives to about 1e-15 relative, for s > 0: the referee of the faster [`Kernel`].
///
/// `z` = (drive - threshold)/half_rise, `s` = noise_sd/half_rise. `s` = 0 gives the noise-free hyperbola (its
/// derivatives at the kink z = 0 are those from above). Not a number where an argument is not finite or `s` < 0.
pub fn evaluate(z: f64, s: f64) -> Smoothed {
    if !(z.is_finite() && s.is_finite() && s >= 0.0) {
        let nan = f64::NAN;
        return Smoothed {
            h: nan,
            dh_dz: nan,
            dh_ds: nan,
            d2h_dz2: nan,
            bend: nan,
            excess: nan,
        };
    }
    if s == 0.0 {
        return noise_free(z);
    }
    let w = z / s;
    if w < LOWEST_W {
        return Smoothed::default();
    }
    if w > 10.0 {
        let rule = &*HERMITE_24;
        let mut sums = [0.0; 5];
        for (x, weight) in rule.nodes.iter().zip(rule.weights) {
            add_node(&mut sums, z + s * x, weight);
        }
        return finish(sums, density_at_zero(z, s), s);
    }
    let rule = &*LEGENDRE_80;
    let p0 = density_at_zero(z, s);
    let mut sums = [0.0; 5];
    if z <= 0.0 {
        // All of q is positive: p = p0 exp(-q). Upper limit where q = 41.
        let reach = 2.0 * 41.0 * s * s;
        let top = reach / (-z + (z * z + reach).sqrt());
        let length = top.ln_1p();
        let mut bent = 0.0;
        for (x, weight) in rule.nodes.iter().zip(rule.weights) {
            let u = (length * x).exp_m1();
            let q = u * (u - 2.0 * z) / (2.0 * s * s);
            let mass = length * weight * (1.0 + u);
            add_node(&mut sums, u, mass * (-q).exp());
            bent += mass * -(-q).exp_m1() / (1.0 + u).powi(3);
        }
        let d2h_dz2 = p0 * ((1.0 + top).powi(-2) + 2.0 * bent);
        let [h, dh_dz, bend, excess, _] = sums.map(|sum| p0 * sum);
        return Smoothed {
            h,
            dh_dz,
            dh_ds: s * d2h_dz2,
            d2h_dz2,
            bend,
            excess,
        };
    }
    let c = s / (1.0 + z);
    let lowest = -z.ln_1p();
    let from = if 9.06 * c < 1.0 {
        lowest.max((-9.06 * c).ln_1p())
    } else {
        lowest
    };
    let to = (9.06 * c).ln_1p();
    let mut bent = 0.0;
    for (x, weight) in rule.nodes.iter().zip(rule.weights) {
        let tau = from + (to - from) * x;
        let grown = tau.exp_m1();
        let u = z + (1.0 + z) * grown;
        let xi = grown / c;
        let mass = (to - from) * weight * (1.0 + grown) / c / (2.0 * PI).sqrt();
        add_node(&mut sums, u, mass * (-0.5 * xi * xi).exp());
        // The same node's share of int 2 (1+u)^-3 (p0 - p) du, with du = s dxi.
        let q = u * (u - 2.0 * z) / (2.0 * s * s);
        bent -= mass * (2.0 * PI).sqrt() * s * (-q).exp_m1() / (1.0 + u).powi(3);
    }
    let top = z + 9.06 * s;
    let [h, dh_dz, bend, excess, cubed] = sums;
    let d2h_dz2 = if w < 3.0 {
        p0 * ((1.0 + top).powi(-2) + 2.0 * bent)
    } else {
        p0 - 2.0 * cubed
    };
    Smoothed {
        h,
        dh_dz,
        dh_ds: s * d2h_dz2,
        d2h_dz2,
        bend,
        excess,
    }
}

/// One node's share of the five integrals.
fn add_node(sums: &mut [f64; 5], u: f64, mass: f64) {
    let inverse = 1.0 / (1.0 + u);
    let ratio = u * inverse;
    sums[0] += mass * ratio;
    sums[1] += mass * inverse * inverse;
    sums[2] += mass * ratio * inverse;
    sums[3] += mass * ratio * ratio;
    sums[4] += mass * inverse * inverse * inverse;
}

fn finish([h, dh_dz, bend, excess, cubed]: [f64; 5], p0: f64, s: f64) -> Smoothed {
    let d2h_dz2 = p0 - 2.0 * cubed;
    Smoothed {
        h,
        dh_dz,
        dh_ds: s * d2h_dz2,
        d2h_dz2,
        bend,
        excess,
    }
}

/// The limit s = 0.
fn noise_free(z: f64) -> Smoothed {
    if z < 0.0 {
        return Smoothed::default();
    }
    let inverse = 1.0 / (1.0 + z);
    let ratio = z * inverse;
    Smoothed {
        h: ratio,
        dh_dz: inverse * inverse,
        dh_ds: 0.0,
        d2h_dz2: -2.0 * inverse * inverse * inverse,
        bend: ratio * inverse,
        excess: ratio * ratio,
    }
}

/// Rules of the fast evaluation, fetched once a fit.
#[derive(Debug)]
struct FastRules {
    rough_below: Rule<16>,
    legendre_24: Rule<24>,
    legendre_32: Rule<32>,
    legendre_40: Rule<40>,
    legendre_48: Rule<48>,
    legendre_80: Rule<80>,
    hermite_8: Rule<8>,
    hermite_16: Rule<16>,
    hermite_24: Rule<24>,
}

static FAST: LazyLock<FastRules> = LazyLock::new(|| FastRules {
    rough_below: legendre(),
    legendre_24: legendre(),
    legendre_32: legendre(),
    legendre_40: legendre(),
    legendre_48: legendre(),
    legendre_80: legendre(),
    hermite_8: hermite(),
    hermite_16: hermite(),
    hermite_24: hermite(),
});

/// Number of partial sums kept apart, so that the compiler can add in vector lanes and the order stays fixed.
const LANES: usize = 8;

/// The curve at one fixed `s`, for many `z`: what a pass of the fit evaluates.
///
/// Keeps 1e-11 relative to the referee for s up to 50 and z/s from -37 up, 1e-8 beyond. Call it inside
/// [`vectorised`], where the compiler may use the machine's widest vectors.
#[derive(Clone, Copy, Debug)]
pub struct Kernel {
    rules: &'static FastRules,
    s: f64,
    half_precision: f64,
    p0_scale: f64,
    rough: bool,
    below: Nodes,
    above: [Nodes; 3],
}

/// How many nodes a panel needs.
#[derive(Clone, Copy, Debug)]
enum Nodes {
    Rough16,
    Of24,
    Of32,
    Of40,
    Of48,
    Of80,
}

/// The least number of nodes that keeps 1e-11, found by trying them all against [`evaluate`]: below the threshold,
/// and above it for z/s up to 2, 4 and 7.5. The wider the noise, the more the pole at u = -1 costs.
fn nodes(s: f64) -> (Nodes, [Nodes; 3]) {
    use Nodes::{Of24, Of32, Of40, Of48, Of80};
    let below = if s <= 1.5 {
        Of24
    } else if s <= 20.0 {
        Of32
    } else {
        Of80
    };
    let above = if s <= 0.05 {
        [Of24, Of24, Of32]
    } else if s <= 0.4 {
        [Of24, Of32, Of40]
    } else if s <= 1.0 {
        [Of32, Of32, Of48]
    } else if s <= 2.0 {
        [Of32, Of40, Of48]
    } else if s <= 5.0 {
        [Of32, Of40, Of80]
    } else {
        [Of80; 3]
    };
    (below, above)
}

impl Kernel {
    /// Prepares the curve for `s` = noise_sd/half_rise, positive.
    pub fn new(s: f64) -> Self {
        let (below, above) = nodes(s);
        Self {
            below,
            above,
            rules: &FAST,
            s,
            half_precision: 0.5 / (s * s),
            p0_scale: 1.0 / (s * (2.0 * PI).sqrt()),
            rough: false,
        }
    }

    /// The same to about 1e-4 with a third of the nodes: to choose among starts, never for a result.
    pub fn rough(s: f64) -> Self {
        Self {
            rough: true,
            below: Nodes::Rough16,
            above: [Nodes::Of24; 3],
            ..Self::new(s)
        }
    }

    /// The `s` it was made for.
    pub fn noise(&self) -> f64 {
        self.s
    }

    /// h and its gradient at `z`.
    #[inline(always)]
    pub fn at(&self, z: f64) -> Slope {
        let s = self.s;
        let w = z / s;
        if w < LOWEST_W {
            return Slope::default();
        }
        let c = s / (1.0 + z);
        let (factor, [dh_dz, bend, excess]) = if self.rough && w > 3.5 && c < 0.2 {
            (1.0, self.far(&self.rules.hermite_8, z))
        } else if w > 7.5 && c < 0.1 {
            let sums = if c < 0.012 {
                self.far(&self.rules.hermite_8, z)
            } else if c < 0.05 {
                self.far(&self.rules.hermite_16, z)
            } else {
                self.far(&self.rules.hermite_24, z)
            };
            (1.0, sums)
        } else {
            let (rules, top) = if z <= 0.0 {
                let reach = if self.rough { 24.0 } else { 66.0 } * s * s;
                (self.below, reach / (-z + (z * z + reach).sqrt()))
            } else {
                let above = if w <= 2.0 {
                    self.above[0]
                } else if w <= 4.0 {
                    self.above[1]
                } else if w <= 7.5 {
                    self.above[2]
                } else {
                    Nodes::Of80
                };
                (above, z + if self.rough { 4.5 } else { 7.6 } * s)
            };
            let r = self.rules;
            let sums = match rules {
                Nodes::Rough16 => self.near(&r.rough_below, z, top),
                Nodes::Of24 => self.near(&r.legendre_24, z, top),
                Nodes::Of32 => self.near(&r.legendre_32, z, top),
                Nodes::Of40 => self.near(&r.legendre_40, z, top),
                Nodes::Of48 => self.near(&r.legendre_48, z, top),
                Nodes::Of80 => self.near(&r.legendre_80, z, top),
            };
            (self.p0_scale * vector_exp::exp(-0.5 * w * w), sums)
        };
        let (dh_dz, bend, excess) = (factor * dh_dz, factor * bend, factor * excess);
        Slope {
            h: bend + excess,
            dh_dz,
            bend,
            excess,
            dh_dlns: bend - z * dh_dz,
        }
    }

    /// Gauss-Hermite, where the kink is out of the noise's reach.
    #[inline(always)]
    fn far<const N: usize>(&self, rule: &Rule<N>, z: f64) -> [f64; 3] {
        let mut lanes = [[0.0; LANES]; 3];
        for block in 0..N / LANES {
            for lane in 0..LANES {
                let i = block * LANES + lane;
                let u = z + self.s * rule.nodes[i];
                let inverse = 1.0 / (1.0 + u);
                let squared = rule.weights[i] * inverse * inverse;
                let first = squared * u;
                lanes[0][lane] += squared;
                lanes[1][lane] += first;
                lanes[2][lane] = first.mul_add(u, lanes[2][lane]);
            }
        }
        fold(&lanes)
    }

    /// One Gauss-Legendre panel in t = ln(1+u) from 0 to `top`, relative to p0.
    #[inline(always)]
    fn near<const N: usize>(&self, rule: &Rule<N>, z: f64, top: f64) -> [f64; 3] {
        let length = top.ln_1p();
        if length <= 0.35 {
            self.panel::<N, true>(rule, z, length)
        } else {
            self.panel::<N, false>(rule, z, length)
        }
    }

    #[inline(always)]
    fn panel<const N: usize, const SHORT: bool>(&self, rule: &Rule<N>, z: f64, length: f64) -> [f64; 3] {
        let twice = 2.0 * z;
        let scale = -self.half_precision;
        let mut lanes = [[0.0; LANES]; 3];
        for block in 0..N / LANES {
            for lane in 0..LANES {
                let i = block * LANES + lane;
                let t = length * rule.nodes[i];
                let (u, grown) = if SHORT {
                    let u = t * vector_exp::growth(t);
                    (u, 1.0 + u)
                } else {
                    let grown = vector_exp::exp(t);
                    (grown - 1.0, grown)
                };
                let density = vector_exp::exp(u * (u - twice) * scale);
                // (1+u)^-2 p du, with du = (1+u) dt.
                let squared = rule.weights[i] * density / grown;
                let first = squared * u;
                lanes[0][lane] += squared;
                lanes[1][lane] += first;
                lanes[2][lane] = first.mul_add(u, lanes[2][lane]);
            }
        }
        fold(&lanes).map(|sum| sum * length)
    }
}

/// What the fit needs of the curve at one z: h and its gradient, all dimensionless.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Slope {
    /// h(z, s).
    pub h: f64,
    /// dh/dz.
    pub dh_dz: f64,
    /// z dh/dz + s dh/ds, without cancellation.
    pub bend: f64,
    /// h - bend, without cancellation.
    pub excess: f64,
    /// s dh/ds, as the difference of `bend` and z dh/dz: exact to rounding of `bend`.
    pub dh_dlns: f64,
}

#[inline(always)]
fn fold(lanes: &[[f64; LANES]; 3]) -> [f64; 3] {
    lanes.map(|l| ((l[0] + l[4]) + (l[2] + l[6])) + ((l[1] + l[5]) + (l[3] + l[7])))
}

/// Work that [`vectorised`] runs. Its `run`, and all that it calls, must be `#[inline(always)]`: only what is
/// inlined is compiled for the machine's vectors.
pub trait Pass {
    /// What the work returns.
    type Output;
    /// Does the work.
    fn run(self) -> Self::Output;
}

struct Op<W>(W);

impl<W: Pass> pulp::NullaryFnOnce for Op<W> {
    type Output = W::Output;

    #[inline(always)]
    fn call(self) -> W::Output {
        self.0.run()
    }
}

/// Runs `work` compiled for the widest vectors this machine has. The bits of the result do not depend on the
/// machine: every operation is correctly rounded and every sum has a fixed order.
#[inline(always)]
pub fn vectorised<W: Pass>(work: W) -> W::Output {
    static ARCH: LazyLock<pulp::Arch> = LazyLock::new(pulp::Arch::new);
    ARCH.dispatch(Op(work))
}
