//! What a cell is driven with: steps of constant input, in sweeps of their own or on one time line.

use crate::model::Input;

/// One stretch of constant input.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Step {
    /// The sweep it is in; `None` on a continuous time line.
    pub sweep: Option<u32>,
    /// Start, ms in the sweep or on the time line.
    pub onset_ms: f64,
    /// End, ms.
    pub offset_ms: f64,
    /// What is injected.
    pub input: Input,
}

/// Evenly spaced levels of drive.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Levels {
    /// The lowest, pA or nS.
    pub first: f64,
    /// From one to the next.
    pub spacing: f64,
    /// How many.
    pub count: u32,
}

impl Levels {
    /// The levels, ascending.
    pub fn values(self) -> impl DoubleEndedIterator<Item = f64> {
        (0..self.count).map(move |i| self.first + self.spacing * f64::from(i))
    }

    /// Every `n`-th level only.
    pub fn every(self, n: u32) -> Self {
        Self {
            spacing: self.spacing * f64::from(n),
            count: self.count.div_ceil(n),
            ..self
        }
    }
}

/// Times of a protocol, ms.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Timing {
    /// Before a step: from the start of the sweep, or since the last step.
    pub before_ms: f64,
    /// The step itself.
    pub step_ms: f64,
    /// Recorded after the last step of a sweep or time line.
    pub after_ms: f64,
}

/// One step a sweep, sweeps numbered from 1, levels ascending and then again from the bottom.
pub fn sweeps(levels: Levels, repeats: u32, timing: Timing, input: impl Fn(u32, f64) -> Input) -> Vec<Step> {
    let presented = (0..repeats).flat_map(|repeat| levels.values().map(move |level| (repeat, level)));
    (1..)
        .zip(presented)
        .map(|(sweep, (repeat, level))| Step {
            sweep: Some(sweep),
            onset_ms: timing.before_ms,
            offset_ms: timing.before_ms + timing.step_ms,
            input: input(repeat, level),
        })
        .collect()
}

/// All steps on one time line, levels up, then down, then up again.
pub fn time_line(
    levels: Levels,
    repeats: u32,
    timing: Timing,
    input: impl Fn(u32, f64) -> Input,
) -> Vec<Step> {
    let mut steps = Vec::new();
    for repeat in 0..repeats {
        let up: Vec<f64> = levels.values().collect();
        let presented: Vec<f64> = if repeat % 2 == 0 {
            up
        } else {
            levels.values().rev().collect()
        };
        for level in presented {
            let onset_ms = timing.before_ms + steps.len() as f64 * (timing.before_ms + timing.step_ms);
            steps.push(Step {
                sweep: None,
                onset_ms,
                offset_ms: onset_ms + timing.step_ms,
                input: input(repeat, level),
            });
        }
    }
    steps
}

#[cfg(test)]
mod tests {
    use super::*;

    const LEVELS: Levels = Levels {
        first: -50.0,
        spacing: 25.0,
        count: 5,
    };
    const TIMING: Timing = Timing {
        before_ms: 100.0,
        step_ms: 600.0,
        after_ms: 200.0,
    };

    #[test]
    fn sweeps_repeat_the_levels_upwards() {
        let steps = sweeps(LEVELS, 2, TIMING, |_, level| Input::current(level));
        assert_eq!(steps.len(), 10);
        assert_eq!(steps[9].sweep, Some(10));
        let currents: Vec<f64> = steps.iter().map(|step| step.input.current_pa).collect();
        assert_eq!(currents[..5], [-50.0, -25.0, 0.0, 25.0, 50.0]);
        assert_eq!(currents[..5], currents[5..]);
        assert!(
            steps
                .iter()
                .all(|step| (step.onset_ms, step.offset_ms) == (100.0, 700.0))
        );
    }

    #[test]
    fn the_time_line_goes_up_and_down_without_overlap() {
        let steps = time_line(LEVELS, 2, TIMING, |_, level| Input::conductance(level, 3.0));
        assert_eq!(steps[4].input, steps[5].input);
        assert_eq!(steps[0].input, steps[9].input);
        assert!(
            steps
                .windows(2)
                .all(|pair| pair[1].onset_ms - pair[0].offset_ms == 100.0)
        );
    }

    #[test]
    fn thinned_levels_keep_their_range() {
        let thin: Vec<f64> = LEVELS.every(2).values().collect();
        assert_eq!(thin, [-50.0, 0.0, 50.0]);
    }
}
