//! A rate function with its numbers put in, for running rather than fitting: rate and slope at any drive.

use super::smoothed_hyperbola::{Kernel, Pass, Slope, vectorised};
use super::smoothed_ramp::ramp;

/// Nodes of a table for each noise SD: the interpolation error is then below 2e-5 of initial gain times noise SD.
const NODES_PER_NOISE: f64 = 4.0;
/// Most nodes of a table. Where the range holds more noise SDs than that allows, the curve is evaluated directly.
const MOST_NODES: f64 = 4096.0;

/// Rate and its derivative by the drive.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct RateAt {
    /// Rate, Hz.
    pub rate: f64,
    /// Slope, Hz per drive unit.
    pub slope: f64,
}

/// The smoothed hyperbola or, without a ceiling, the smoothed ramp.
#[derive(Clone, Debug)]
pub struct RateFunction {
    shape: Shape,
    gain: f64,
    threshold: f64,
    table: Option<Table>,
}

#[derive(Clone, Copy, Debug)]
enum Shape {
    Hyperbola {
        max_rate: f64,
        per_half_rise: f64,
        kernel: Kernel,
    },
    NoiseFree {
        ceiling: f64,
    },
    Ramp {
        noise: f64,
    },
}

impl RateFunction {
    /// From 1/initial gain (drive units per Hz), 1/max rate (1/Hz; 0 for no ceiling), threshold and noise SD (drive
    /// units; 0 for none). `None` unless all are finite, the first positive and the second and last not negative.
    pub fn new(inverse_gain: f64, ceiling: f64, threshold: f64, noise_sd: f64) -> Option<Self> {
        let finite = [inverse_gain, ceiling, threshold, noise_sd]
            .iter()
            .all(|x| x.is_finite());
        if !(finite && inverse_gain > 0.0 && ceiling >= 0.0 && noise_sd >= 0.0) {
            return None;
        }
        let gain = 1.0 / inverse_gain;
        let per_half_rise = gain * ceiling;
        let shape = if noise_sd == 0.0 {
            Shape::NoiseFree { ceiling }
        } else if ceiling > 0.0 {
            Shape::Hyperbola {
                max_rate: 1.0 / ceiling,
                per_half_rise,
                kernel: Kernel::new(noise_sd * per_half_rise),
            }
        } else {
            Shape::Ramp { noise: noise_sd }
        };
        gain.is_finite().then_some(Self {
            shape,
            gain,
            threshold,
            table: None,
        })
    }

    /// From the parameters as they are reported: max rate (Hz), half-rise, threshold and noise SD (drive units).
    /// `None` under the conditions of [`RateFunction::new`].
    pub fn from_reported(max_rate: f64, half_rise: f64, threshold: f64, noise_sd: f64) -> Option<Self> {
        Self::new(half_rise / max_rate, 1.0 / max_rate, threshold, noise_sd)
    }

    /// Initial gain, Hz per drive unit: no slope of the curve is steeper.
    pub fn initial_gain(&self) -> f64 {
        self.gain
    }

    /// The same function with its values between `low` and `high` kept in a table (cubic Hermite interpolation, error
    /// below 2e-5 of initial gain times noise SD): for the many evaluations of an integration. Outside, and for a
    /// noise too small for a table of reasonable size, it is evaluated as before.
    pub fn tabulated(mut self, low: f64, high: f64) -> Self {
        self.table = None;
        let noise = match self.shape {
            Shape::Hyperbola {
                per_half_rise,
                kernel,
                ..
            } => kernel.noise() / per_half_rise,
            Shape::Ramp { noise } => noise,
            Shape::NoiseFree { .. } => return self,
        };
        let nodes = ((high - low) / noise * NODES_PER_NOISE).ceil().max(16.0);
        if !(nodes <= MOST_NODES && high > low) {
            return self;
        }
        let width = (high - low) / nodes;
        let nodes = (0..=nodes as usize)
            .map(|i| self.direct(low + width * i as f64))
            .collect();
        self.table = Some(Table { low, width, nodes });
        self
    }

    /// Rate and slope at `drive`; not a number for a drive that is none.
    pub fn at(&self, drive: f64) -> RateAt {
        if let Some(found) = self.table.as_ref().and_then(|table| table.at(drive)) {
            return found;
        }
        self.direct(drive)
    }

    fn direct(&self, drive: f64) -> RateAt {
        let x = drive - self.threshold;
        match self.shape {
            Shape::Hyperbola {
                max_rate,
                per_half_rise,
                kernel,
            } => {
                let f = vectorised(One {
                    kernel,
                    z: x * per_half_rise,
                });
                RateAt {
                    rate: max_rate * f.h,
                    slope: self.gain * f.dh_dz,
                }
            }
            Shape::Ramp { noise } => {
                let f = ramp(x, noise);
                RateAt {
                    rate: self.gain * f.value,
                    slope: self.gain * f.above,
                }
            }
            Shape::NoiseFree { .. } if x <= 0.0 => RateAt::default(),
            Shape::NoiseFree { ceiling } => {
                let inverse = 1.0 / (1.0 + ceiling * self.gain * x);
                RateAt {
                    rate: self.gain * x * inverse,
                    slope: self.gain * inverse * inverse,
                }
            }
        }
    }
}

/// One evaluation, compiled for the machine's vectors.
struct One {
    kernel: Kernel,
    z: f64,
}

impl Pass for One {
    type Output = Slope;

    #[inline(always)]
    fn run(self) -> Slope {
        self.kernel.at(self.z)
    }
}

#[derive(Clone, Debug)]
struct Table {
    low: f64,
    width: f64,
    nodes: Vec<RateAt>,
}

impl Table {
    fn at(&self, drive: f64) -> Option<RateAt> {
        let place = (drive - self.low) / self.width;
        if !(place >= 0.0) {
            return None;
        }
        let i = place as usize;
        let (a, b) = (self.nodes.get(i)?, self.nodes.get(i + 1)?);
        let t = place - i as f64;
        let rise = b.rate - a.rate;
        let (p, q) = (self.width * a.slope, self.width * b.slope);
        // f(t) = a + p t + (3 rise - 2p - q) t^2 + (p + q - 2 rise) t^3.
        let (square, cube) = (3.0 * rise - 2.0 * p - q, p + q - 2.0 * rise);
        Some(RateAt {
            rate: a.rate + t * (p + t * (square + t * cube)),
            slope: (p + t * (2.0 * square + t * 3.0 * cube)) / self.width,
        })
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::curve::smoothed_hyperbola::evaluate;

    #[test]
    fn is_the_curve_and_its_slope() {
        let f = RateFunction::from_reported(90.0, 150.0, 120.0, 20.0).unwrap();
        for drive in [-50.0, 60.0, 120.0, 300.0, 2000.0] {
            let exact = evaluate((drive - 120.0) / 150.0, 20.0 / 150.0);
            let at = f.at(drive);
            assert!((at.rate - 90.0 * exact.h).abs() <= 1e-9 * exact.h);
            assert!((at.slope - 90.0 / 150.0 * exact.dh_dz).abs() <= 1e-9 * exact.dh_dz);
            assert!(at.slope <= f.initial_gain());
        }
        // Limits: no noise, no ceiling.
        let plain = RateFunction::from_reported(90.0, 150.0, 120.0, 0.0).unwrap();
        assert!((plain.at(270.0).rate - 45.0).abs() < 1e-12);
        assert!((plain.at(270.0).slope - 0.15).abs() < 1e-12);
        assert_eq!(plain.at(100.0), RateAt::default());
        let open = RateFunction::new(1.0 / 0.6, 0.0, 120.0, 20.0).unwrap();
        let nearly = RateFunction::new(1.0 / 0.6, 1e-9, 120.0, 20.0).unwrap();
        assert!((open.at(150.0).rate / nearly.at(150.0).rate - 1.0).abs() < 1e-6);
        for bad in [
            [0.0, 0.01, 1.0, 1.0],
            [1.0, -0.1, 1.0, 1.0],
            [1.0, 0.1, f64::NAN, 1.0],
            [1.0, 0.1, 0.0, -1.0],
        ] {
            assert!(RateFunction::new(bad[0], bad[1], bad[2], bad[3]).is_none());
        }
    }

    #[test]
    fn a_table_changes_nothing_that_matters() {
        for ceiling in [0.0, 0.012] {
            let f = RateFunction::new(1.5, ceiling, 120.0, 7.0).unwrap();
            let table = f.clone().tabulated(-100.0, 900.0);
            assert!(table.table.is_some());
            let limit = 2e-5 * f.initial_gain() * 7.0;
            for i in 0..5000 {
                let drive = -150.0 + 0.22 * f64::from(i);
                let (a, b) = (f.at(drive), table.at(drive));
                assert!((a.rate - b.rate).abs() < limit, "{drive}: {a:?} {b:?}");
                assert!((a.slope - b.slope).abs() < 1e-3 * f.initial_gain());
            }
        }
        let sharp = RateFunction::new(1.5, 0.01, 120.0, 0.01).unwrap();
        assert!(sharp.tabulated(0.0, 1000.0).table.is_none());
    }
}
