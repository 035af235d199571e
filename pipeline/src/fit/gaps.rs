//! The cost of one rate function over levels, and the way down it through the gaps between drives.
//!
//! A curve with a kink at a free threshold has a cost that is smooth only while the threshold stays between two
//! neighbouring drives, so each gap is a bounded problem of its own.

use super::objective::Levels;
use super::rival_starts::Starts;
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};
use crate::curve::RateFunction;

/// A rival as the search needs it.
pub(super) trait Rival<const P: usize>: RateFunction<P> + Starts<P> {}

impl<const P: usize, R: RateFunction<P> + Starts<P>> Rival<P> for R {}

/// Lowest and highest drive.
pub(super) fn ends(levels: &Levels) -> (f64, f64) {
    match (levels.drives.first(), levels.drives.last()) {
        (Some(first), Some(last)) => (*first, *last),
        _ => (0.0, 0.0),
    }
}

/// The weighted sum of squares of one curve over levels.
pub(super) struct Cost<'a, R> {
    pub(super) levels: &'a Levels,
    pub(super) curve: std::marker::PhantomData<R>,
}

impl<'a, R> Cost<'a, R> {
    pub(super) fn new(levels: &'a Levels) -> Self {
        Self {
            levels,
            curve: std::marker::PhantomData,
        }
    }
}

impl<R> Cost<'_, R> {
    #[inline(always)]
    fn pass<const P: usize>(&self, parameters: &[f64; P], sums: &mut NormalSums<P>)
    where
        R: RateFunction<P>,
    {
        let l = self.levels;
        sums.cost = l.within;
        let curve = R::new(parameters);
        for ((drive, rate), w) in l.drives.iter().zip(&l.rates).zip(&l.root_weights) {
            let at = curve.at(*drive);
            sums.add(w * (rate - at.rate), &at.derivatives.map(|d| w * d));
        }
    }

    /// What keeps the stopping rules meaningful, and the minimum where it is. A parameter that changes nothing here (a
    /// noise SD far below the spacing of the drives, a threshold below an all but flat curve) would make the curvature
    /// singular: it gets a least curvature. And points that the curve meets exactly would leave no cost for a step to
    /// be measured by: a constant stands for the rounding of the rates.
    #[inline(always)]
    fn support<const P: usize>(&self, sums: &mut NormalSums<P>) {
        let weight: f64 = self.levels.root_weights.iter().map(|w| w * w).sum();
        sums.cost += ROUNDING * weight;
        let floor = CURVATURE_FLOOR * weight;
        for i in 0..P {
            sums.curvature[i][i] += floor;
        }
    }
}

impl<const P: usize, R: RateFunction<P>> LeastSquares<P> for Cost<'_, R> {
    #[inline]
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        self.pass(parameters, sums);
        self.support(sums);
    }
}

/// Squared error of a rate, in peak rates, that counts as none.
const ROUNDING: f64 = 1e-16;

/// Least curvature of a parameter, as a fraction of what it has where one unit of it changes every rate by the peak.
const CURVATURE_FLOOR: f64 = 1e-13;

/// The gap (index of the drive above it) in which a threshold lies; one that is on a drive belongs to the gap above.
pub(super) fn gap_of(drives: &[f64], threshold: f64) -> usize {
    drives.partition_point(|d| *d <= threshold).min(drives.len() - 1)
}

/// A threshold within one gap, searched as t = ln(drive above the gap - threshold): the slope of a curve that rises
/// infinitely fast is finite in t, and the valley of a steep curve, whose gain and threshold keep the rate of one
/// drive, is straight.
#[derive(Clone, Copy)]
pub(super) struct Gap {
    index: usize,
    bottom: f64,
    top: f64,
    /// Limits of t.
    t: [f64; 2],
}

/// Closest that a threshold comes to the drive above it, in gaps; on it, it belongs to the next gap.
const CLOSEST: f64 = 1e-9;

impl Gap {
    /// Whether a threshold is as close below the drive above as the search goes.
    pub(super) fn is_closest(&self, threshold: f64) -> bool {
        self.top - threshold <= 1.01 * CLOSEST * (self.top - self.bottom)
    }

    /// Gap number `number` within `limits`; `None` where they leave nothing of it.
    pub(super) fn new(index: usize, limits: [f64; 2], drives: &[f64], number: usize) -> Option<Self> {
        let bottom = if number > 0 {
            limits[0].max(drives[number - 1])
        } else {
            limits[0]
        };
        let top = limits[1].min(drives[number]);
        (top > bottom).then(|| Self {
            index,
            bottom,
            top,
            t: [(CLOSEST * (top - bottom)).ln(), (top - bottom).ln()],
        })
    }

    fn threshold(&self, t: f64) -> f64 {
        if t >= self.t[1] {
            self.bottom
        } else {
            (self.top - t.exp()).max(self.bottom)
        }
    }

    /// t of a threshold; one on the drive above, where t has no value, starts a little below it.
    fn t_of(&self, threshold: f64) -> f64 {
        if threshold <= self.bottom {
            return self.t[1];
        }
        let below = self.top - threshold;
        if below > 0.0 {
            below.ln().clamp(self.t[0], self.t[1])
        } else {
            self.t[1] - 7.0
        }
    }
}

/// A search allowed this many iterations that still has not converged crawls along a bent valley.
const CRAWLING: u64 = 60;

/// The cost with the threshold replaced by t.
struct InGap<'a, 'b, R> {
    cost: &'a Cost<'b, R>,
    gap: Gap,
}

impl<const P: usize, R: RateFunction<P>> LeastSquares<P> for InGap<'_, '_, R> {
    #[inline]
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        let index = self.gap.index;
        let mut natural = *parameters;
        natural[index] = self.gap.threshold(parameters[index]);
        self.cost.pass(&natural, sums);
        let slope = -parameters[index].exp();
        sums.gradient[index] *= slope;
        for i in 0..P {
            if i < index {
                sums.curvature[index][i] *= slope;
            } else if i == index {
                sums.curvature[i][i] *= slope * slope;
            } else {
                sums.curvature[i][index] *= slope;
            }
        }
        self.cost.support(sums);
    }
}

/// Down to the minimum within one gap. The solution is in the chart of the curve.
pub(super) fn minimise_in_gap<const P: usize, R: Rival<P>>(
    cost: &Cost<'_, R>,
    gap: Gap,
    start: [f64; P],
    options: &SolverOptions<P>,
    evaluations: &mut u64,
) -> Solution<P> {
    let index = gap.index;
    let mut inside = *options;
    if !R::INFINITE_SLOPE {
        (inside.lower[index], inside.upper[index]) = (gap.bottom, gap.top);
        let found = minimise(cost, start, &inside);
        *evaluations += found.evaluations;
        // A search that its options cut short has not failed.
        if found.converged || options.max_iterations < CRAWLING {
            return found;
        }
    }
    (inside.lower[index], inside.upper[index]) = (gap.t[0], gap.t[1]);
    let mut from = start;
    from[index] = gap.t_of(start[index]);
    let mut found = minimise(&InGap { cost, gap }, from, &inside);
    found.parameters[index] = gap.threshold(found.parameters[index]);
    // Sums by the threshold itself.
    found.sums = NormalSums::default();
    cost.accumulate(&found.parameters, &mut found.sums);
    found.sums.curvature = found.sums.symmetric();
    *evaluations += found.evaluations + 1;
    found
}

/// From `start` down to a minimum: the threshold of a curve with a kink is kept between two drives, and where the
/// search ends on one of them it goes on in the next gap for as long as that lowers the cost. `drives` are those that
/// have weight.
pub(super) fn descend<const P: usize, R: Rival<P>>(
    cost: &Cost<'_, R>,
    drives: &[f64],
    start: [f64; P],
    options: &SolverOptions<P>,
    evaluations: &mut u64,
) -> Solution<P> {
    let Some(index) = R::THRESHOLD else {
        let found = minimise(cost, start, options);
        *evaluations += found.evaluations;
        return found;
    };
    let limits = [options.lower[index], options.upper[index]];
    let mut number = gap_of(drives, start[index]);
    let Some(mut gap) = Gap::new(index, limits, drives, number) else {
        let found = minimise(cost, start, options);
        *evaluations += found.evaluations;
        return found;
    };
    let mut best = minimise_in_gap(cost, gap, start, options, evaluations);
    // Each move lowers the cost or finishes an unfinished search; the gaps bound their number.
    for _ in 0..drives.len() {
        let at = best.parameters[index];
        let on_top = gap.top - at <= 1e-6 * (gap.top - gap.bottom);
        let (next, from) = if on_top && number + 1 < drives.len() {
            (number + 1, gap.top)
        } else if at <= gap.bottom && number > 0 {
            (number - 1, gap.bottom)
        } else {
            break;
        };
        let Some(next_gap) = Gap::new(index, limits, drives, next) else {
            break;
        };
        let mut start = best.parameters;
        start[index] = from;
        let found = minimise_in_gap(cost, next_gap, start, options, evaluations);
        let margin = 1e-12 * best.cost();
        // Seen from above, the side on which the drive is silent, a kink is a minimum or is none.
        let settles =
            next > number && found.converged && !best.converged && found.cost() <= best.cost() + margin;
        if !(found.cost() < best.cost() - margin || settles) {
            break;
        }
        (best, gap, number) = (found, next_gap, next);
    }
    best
}
