//! Who is recorded: the invented cell types, the roster of both sets, and their simulated spikes.

use rand_chacha::ChaCha12Rng;
use rand_chacha::rand_core::SeedableRng;
use rand_distr::{Distribution, StandardNormal};

use crate::model::{Adaptation, Block, Cell, Input, Membrane, Noise, Simulation};
use crate::protocol::{Levels, Step, Timing, sweeps, time_line};

/// Seed of every random number in the survey; each cell has a stream of its own under it.
pub const SEED: [u8; 32] = *b"veltmoor survey, no such cells..";

/// An invented cell type.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// Regular: moderate adaptation, a ceiling near 110 Hz within reach.
    Tarn,
    /// Fast: next to no adaptation, a ceiling near 190 Hz.
    Flint,
    /// Strongly adapting, which straightens the curve: no ceiling within reach.
    Ember,
    /// Slow and noisy: large time constant, slow input noise, a ceiling near 65 Hz.
    Fen,
}

/// What sets a cell apart from its type.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Quirk {
    /// Nothing.
    Plain,
    /// A large capacitance, a short refractory period and more noise: the ceiling is far beyond the range of drive.
    Unsaturated,
    /// Depolarisation block: the rate fades and ends within the range.
    Block,
    /// Slow depolarisation block: strong steps give a fast burst, then nothing.
    BurstThenBlock,
    /// Far too leaky to reach threshold.
    Silent,
    /// The leak reversal potential sinks by 5 mV over the recording.
    Drift,
    /// Spikes also without a step.
    Spontaneous,
    /// Lost early: a few levels, once each.
    FewLevels,
    /// Some spikes are listed twice, 0.6 ms apart, as by a careless detector.
    DetectedTwice,
    /// The second run of levels is of the other kind of drive.
    MixedDrive,
    /// The second run of levels is under another inhibitory conductance.
    VaryingInhibition,
    /// The cell table does not mention it.
    NotInTable,
}

impl Kind {
    /// Its name in the cell table.
    pub fn name(self) -> &'static str {
        match self {
            Self::Tarn => "tarn",
            Self::Flint => "flint",
            Self::Ember => "ember",
            Self::Fen => "fen",
        }
    }

    /// The typical cell.
    fn typical(self) -> Cell {
        let (capacitance_pf, g_leak_ns, e_leak_mv, v_threshold_mv, v_reset_mv, refractory_ms) = match self {
            Self::Tarn => (150.0, 9.0, -71.0, -52.0, -60.0, 9.0),
            Self::Flint => (70.0, 8.0, -68.0, -46.0, -60.0, 5.2),
            Self::Ember => (180.0, 8.0, -70.0, -50.0, -60.0, 2.0),
            Self::Fen => (220.0, 6.0, -66.0, -50.0, -59.0, 15.0),
        };
        let (step_pa, decay_ms) = match self {
            Self::Tarn => (6.0, 110.0),
            Self::Flint => (1.0, 60.0),
            Self::Ember => (45.0, 180.0),
            Self::Fen => (5.0, 150.0),
        };
        Cell {
            membrane: Membrane {
                capacitance_pf,
                g_leak_ns,
                e_leak_mv,
                v_threshold_mv,
                v_reset_mv,
                refractory_ms,
            },
            e_exc_mv: 0.0,
            e_inh_mv: -76.0,
            adaptation: Adaptation { step_pa, decay_ms },
            noise: match self {
                Self::Tarn => Noise::White { sd_mv: 1.8 },
                Self::Flint => Noise::White { sd_mv: 2.2 },
                Self::Ember => Noise::White { sd_mv: 2.6 },
                Self::Fen => Noise::Coloured {
                    sd_pa: 45.0,
                    correlation_ms: 8.0,
                },
            },
            block: None,
        }
    }

    /// A cell of the type, with its quirk. A cell with block begins to suffer once its plateau is `block_above_mv`
    /// above threshold.
    fn draw(self, quirk: Quirk, block_above_mv: f64, random: &mut ChaCha12Rng) -> Cell {
        let mut vary = |value: f64, spread: f64| {
            let z: f64 = StandardNormal.sample(random);
            value + spread * z.clamp(-2.0, 2.0)
        };
        let mut cell = self.typical();
        let m = &mut cell.membrane;
        m.capacitance_pf = vary(m.capacitance_pf, 0.10 * m.capacitance_pf);
        m.g_leak_ns = vary(m.g_leak_ns, 0.10 * m.g_leak_ns);
        m.e_leak_mv = vary(m.e_leak_mv, 1.2);
        m.v_threshold_mv = vary(m.v_threshold_mv, 1.2);
        m.v_reset_mv = vary(m.v_reset_mv, 0.8);
        m.refractory_ms = vary(m.refractory_ms, 0.10 * m.refractory_ms);
        cell.adaptation.step_pa = vary(cell.adaptation.step_pa, 0.15 * cell.adaptation.step_pa);
        cell.noise = match cell.noise {
            Noise::Off => Noise::Off,
            Noise::White { sd_mv } => Noise::White {
                sd_mv: vary(sd_mv, 0.2 * sd_mv),
            },
            Noise::Coloured {
                sd_pa,
                correlation_ms,
            } => Noise::Coloured {
                sd_pa: vary(sd_pa, 0.2 * sd_pa),
                correlation_ms,
            },
        };
        let m = &mut cell.membrane;
        match quirk {
            Quirk::Unsaturated => {
                m.capacitance_pf *= 3.0;
                m.refractory_ms = 0.6;
                cell.noise = Noise::White { sd_mv: 4.0 };
            }
            Quirk::Block => {
                cell.block = Some(Block {
                    above_mv: m.v_threshold_mv + block_above_mv,
                    slope: 2.0,
                    follow_ms: 2.0,
                });
            }
            Quirk::BurstThenBlock => {
                cell.block = Some(Block {
                    above_mv: m.v_threshold_mv + block_above_mv,
                    slope: 2.0,
                    follow_ms: 60.0,
                });
            }
            Quirk::Silent => m.g_leak_ns *= 20.0,
            Quirk::Spontaneous => m.e_leak_mv = m.v_threshold_mv - 3.5,
            Quirk::Plain
            | Quirk::Drift
            | Quirk::FewLevels
            | Quirk::DetectedTwice
            | Quirk::MixedDrive
            | Quirk::VaryingInhibition
            | Quirk::NotInTable => {}
        }
        cell
    }
}

/// One recorded cell.
pub struct Recorded {
    /// Its name.
    pub id: String,
    /// Its type.
    pub kind: Kind,
    /// What sets it apart.
    pub quirk: Quirk,
    /// 1 or 2.
    pub day: u32,
    /// What was simulated.
    pub cell: Cell,
    /// What it was driven with.
    pub steps: Vec<Step>,
    /// Spikes in order of time: sweep, and ms in the sweep's time base.
    pub spikes: Vec<(Option<u32>, f64)>,
}

/// Plateau above threshold at which block begins, mV, under current.
const BLOCK_UNDER_CURRENT_MV: f64 = 30.0;
/// The same under conductance, where the plateau can rise no further than the excitatory reversal potential.
const BLOCK_UNDER_CONDUCTANCE_MV: f64 = 11.0;

use Kind::{Ember, Fen, Flint, Tarn};
use Quirk::{
    Block as Blocked, BurstThenBlock, DetectedTwice, Drift, FewLevels, MixedDrive, NotInTable, Plain, Silent,
    Spontaneous, Unsaturated, VaryingInhibition,
};

/// The cells under current steps, `A-..` of the first day, then `B-..` of the second, in order of their numbers.
const CURRENT_ROSTER: [[(Kind, Quirk); 20]; 2] = [
    [
        (Tarn, Plain),
        (Tarn, Plain),
        (Flint, Plain),
        (Ember, Plain),
        (Fen, Plain),
        (Tarn, Plain),
        (Tarn, Drift),
        (Ember, Plain),
        (Flint, Blocked),
        (Fen, Plain),
        (Tarn, Silent),
        (Flint, Plain),
        (Ember, Plain),
        (Tarn, Unsaturated),
        (Fen, Spontaneous),
        (Tarn, Plain),
        (Flint, Plain),
        (Ember, Plain),
        (Tarn, FewLevels),
        (Fen, Plain),
    ],
    [
        (Flint, Plain),
        (Tarn, Plain),
        (Ember, Plain),
        (Fen, Plain),
        (Tarn, DetectedTwice),
        (Flint, Unsaturated),
        (Tarn, Plain),
        (Fen, Plain),
        (Ember, Plain),
        (Flint, BurstThenBlock),
        (Tarn, Plain),
        (Tarn, MixedDrive),
        (Fen, Plain),
        (Flint, Plain),
        (Ember, Plain),
        (Tarn, NotInTable),
        (Flint, Plain),
        (Fen, Drift),
        (Tarn, Plain),
        (Ember, Plain),
    ],
];

/// The cells under conductance steps, `G-01` and on: type, quirk, inhibitory conductance in nS.
const CONDUCTANCE_ROSTER: [(Kind, Quirk, Option<f64>); 30] = [
    (Tarn, Plain, None),
    (Tarn, Plain, Some(4.0)),
    (Flint, Plain, None),
    (Ember, Plain, None),
    (Fen, Plain, Some(0.0)),
    (Tarn, Plain, Some(8.0)),
    (Flint, Plain, Some(5.0)),
    (Fen, Plain, Some(2.0)),
    (Ember, Plain, Some(4.0)),
    (Tarn, Drift, None),
    (Flint, Blocked, None),
    (Tarn, Plain, Some(0.0)),
    (Ember, Plain, None),
    (Fen, Spontaneous, None),
    (Tarn, VaryingInhibition, Some(3.0)),
    (Flint, Plain, Some(0.0)),
    (Tarn, Unsaturated, None),
    (Ember, Plain, Some(2.0)),
    (Fen, Plain, None),
    (Tarn, Silent, Some(4.0)),
    (Flint, Plain, Some(10.0)),
    (Tarn, Plain, Some(6.0)),
    (Ember, Plain, Some(0.0)),
    (Fen, Plain, Some(3.0)),
    (Flint, Unsaturated, None),
    (Tarn, Plain, None),
    (Fen, Plain, Some(1.0)),
    (Tarn, NotInTable, Some(4.0)),
    (Ember, Plain, None),
    (Flint, Plain, Some(5.0)),
];

fn stream(number: usize) -> ChaCha12Rng {
    let mut random = ChaCha12Rng::from_seed(SEED);
    random.set_stream(number as u64);
    random
}

/// Levels, repeats and length of a step in ms of a type under current, pA.
fn current_levels(kind: Kind) -> (Levels, u32, f64) {
    let (first, spacing, count, repeats, step_ms) = match kind {
        Tarn => (0.0, 50.0, 20, 2, 600.0),
        Flint => (0.0, 60.0, 21, 2, 600.0),
        Ember => (-40.0, 40.0, 16, 2, 800.0),
        Fen => (-120.0, 45.0, 18, 3, 800.0),
    };
    (
        Levels {
            first,
            spacing,
            count,
        },
        repeats,
        step_ms,
    )
}

/// Levels of a type under excitatory conductance, nS.
fn conductance_levels(kind: Kind) -> Levels {
    let (first, spacing, count) = match kind {
        Tarn => (0.0, 1.2, 17),
        Flint => (0.0, 1.5, 18),
        Ember => (0.0, 0.75, 19),
        Fen => (0.0, 0.9, 18),
    };
    Levels {
        first,
        spacing,
        count,
    }
}

/// The set of current steps, one step a sweep.
pub fn current_set() -> Vec<Recorded> {
    let roster = (1..).zip(["A", "B"]).zip(&CURRENT_ROSTER);
    let cells = roster.flat_map(|((day, letter), cells)| {
        (1..)
            .zip(cells)
            .map(move |(number, &(kind, quirk))| (day, format!("{letter}-{number:02}"), kind, quirk))
    });
    cells
        .enumerate()
        .map(|(index, (day, id, kind, quirk))| {
            let mut random = stream(1000 + index);
            let cell = kind.draw(quirk, BLOCK_UNDER_CURRENT_MV, &mut random);
            let (levels, repeats, step_ms) = current_levels(kind);
            let (levels, repeats) = if quirk == FewLevels {
                (levels.every(6), 1)
            } else {
                (levels, repeats)
            };
            let timing = Timing {
                before_ms: 100.0,
                step_ms,
                after_ms: 150.0,
            };
            let steps = sweeps(levels, repeats, timing, |repeat, current_pa| {
                if quirk == MixedDrive && repeat > 0 {
                    Input::conductance(current_pa / 50.0, 0.0)
                } else {
                    Input::current(current_pa)
                }
            });
            let mut spikes = Vec::new();
            for (i, step) in steps.iter().enumerate() {
                let mut cell = cell;
                cell.membrane.e_leak_mv += drift_mv(quirk, i, steps.len());
                let mut times_ms = Vec::new();
                let mut simulation = Simulation::at_rest(cell, &mut random);
                simulation.run(Input::default(), step.onset_ms, &mut times_ms);
                simulation.run(step.input, step.offset_ms, &mut times_ms);
                simulation.run(Input::default(), step.offset_ms + timing.after_ms, &mut times_ms);
                spikes.extend(times_ms.into_iter().map(|time_ms| (step.sweep, time_ms)));
            }
            if quirk == DetectedTwice {
                spikes = detect_twice(&spikes);
            }
            Recorded {
                id,
                kind,
                quirk,
                day,
                cell,
                steps,
                spikes,
            }
        })
        .collect()
}

/// The set of conductance steps, one time line a cell.
pub fn conductance_set() -> Vec<Recorded> {
    let timing = Timing {
        before_ms: 400.0,
        step_ms: 800.0,
        after_ms: 400.0,
    };
    (1..)
        .zip(&CONDUCTANCE_ROSTER)
        .map(|(number, &(kind, quirk, inhibition))| {
            let mut random = stream(2000 + number);
            let cell = kind.draw(quirk, BLOCK_UNDER_CONDUCTANCE_MV, &mut random);
            let steps = time_line(conductance_levels(kind), 2, timing, |repeat, g_exc_ns| {
                let more = if quirk == VaryingInhibition {
                    5.0 * f64::from(repeat)
                } else {
                    0.0
                };
                Input::conductance(g_exc_ns, inhibition.unwrap_or(0.0) + more)
            });
            let mut times_ms = Vec::new();
            let mut simulation = Simulation::at_rest(cell, &mut random);
            for (i, step) in steps.iter().enumerate() {
                simulation.set_rest(cell.membrane.e_leak_mv + drift_mv(quirk, i, steps.len()));
                simulation.run(Input::default(), step.onset_ms, &mut times_ms);
                simulation.run(step.input, step.offset_ms, &mut times_ms);
            }
            let end_ms = simulation.now_ms() + timing.after_ms;
            simulation.run(Input::default(), end_ms, &mut times_ms);
            Recorded {
                id: format!("G-{number:02}"),
                kind,
                quirk,
                day: 1,
                cell,
                steps,
                spikes: times_ms.into_iter().map(|time_ms| (None, time_ms)).collect(),
            }
        })
        .collect()
}

/// Inhibition as the protocol states it: cells recorded without leave the field empty.
pub fn stated_inhibition(cell: &Recorded, step: &Step) -> Option<f64> {
    let number: usize = cell.id.trim_start_matches("G-").parse().ok()?;
    CONDUCTANCE_ROSTER.get(number.checked_sub(1)?)?.2?;
    Some(step.input.g_inh_ns)
}

fn drift_mv(quirk: Quirk, step: usize, steps: usize) -> f64 {
    if quirk == Drift {
        -5.0 * step as f64 / (steps - 1) as f64
    } else {
        0.0
    }
}

/// Every 23rd spike again, 0.6 ms later.
fn detect_twice(spikes: &[(Option<u32>, f64)]) -> Vec<(Option<u32>, f64)> {
    (1..)
        .zip(spikes)
        .flat_map(|(number, &(sweep, time_ms))| {
            let again = (number % 23 == 0).then_some((sweep, time_ms + 0.6));
            std::iter::once((sweep, time_ms)).chain(again)
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Interval rate of each step of a recorded cell, Hz: 0 with fewer than two spikes.
    fn rates(cell: &Recorded) -> Vec<f64> {
        cell.steps
            .iter()
            .map(|step| {
                let inside: Vec<f64> = cell
                    .spikes
                    .iter()
                    .filter(|(sweep, time)| {
                        *sweep == step.sweep && (step.onset_ms..step.offset_ms).contains(time)
                    })
                    .map(|&(_, time)| time)
                    .collect();
                match inside[..] {
                    [first, .., last] => 1000.0 * (inside.len() - 1) as f64 / (last - first),
                    _ => 0.0,
                }
            })
            .collect()
    }

    fn peak(rates: &[f64]) -> f64 {
        rates.iter().copied().fold(0.0, f64::max)
    }

    /// Mean rate of three levels at three quarters of the range, and of the three highest, in the first repeat.
    fn late_and_top(cell: &Recorded) -> (f64, f64) {
        let all = rates(cell);
        let level = |i: usize| (cell.steps[i].input.current_pa, cell.steps[i].input.g_exc_ns);
        let levels = (1..all.len())
            .find(|&i| level(i) <= level(i - 1))
            .unwrap_or(all.len());
        let mean =
            |range: std::ops::Range<usize>| all[range.clone()].iter().sum::<f64>() / range.len() as f64;
        let late = levels * 3 / 4;
        (mean(late - 2..late + 1), mean(levels - 3..levels))
    }

    #[test]
    fn rosters_have_what_was_promised() {
        for set in [current_set(), conductance_set()] {
            assert!((24..=60).contains(&set.len()));
            for quirk in [Blocked, Silent, Drift, Spontaneous, Unsaturated] {
                assert!(set.iter().any(|cell| cell.quirk == quirk), "{quirk:?}");
            }
            let mut ids: Vec<&str> = set.iter().map(|cell| cell.id.as_str()).collect();
            ids.sort_unstable();
            ids.dedup();
            assert_eq!(ids.len(), set.len());
        }
    }

    #[test]
    fn each_cell_behaves_as_its_type_and_quirk_say() {
        for set in [current_set(), conductance_set()] {
            for cell in &set {
                let all = rates(cell);
                let name = format!("{} {:?} {:?}", cell.id, cell.kind, cell.quirk);
                match cell.quirk {
                    Silent => assert!(cell.spikes.is_empty(), "{name}"),
                    Blocked => {
                        let levels = all.len() / 2;
                        assert!(peak(&all) > 40.0, "{name}");
                        assert!(
                            all[levels - 3..levels]
                                .iter()
                                .all(|&rate| rate < 0.2 * peak(&all)),
                            "{name}: {all:?}"
                        );
                    }
                    BurstThenBlock => {
                        let (_, top) = late_and_top(cell);
                        assert!(top > 80.0, "{name}: {top} Hz");
                        let last = cell.steps[all.len() - 1].sweep;
                        let in_last = cell.spikes.iter().filter(|spike| spike.0 == last);
                        let late = in_last.filter(|spike| spike.1 > 350.0).count();
                        assert_eq!(late, 0, "{name}: the strongest step ends in silence");
                    }
                    Spontaneous => {
                        let outside = cell.spikes.iter().filter(|(sweep, time)| {
                            !cell.steps.iter().any(|step| {
                                step.sweep == *sweep && (step.onset_ms..step.offset_ms).contains(time)
                            })
                        });
                        assert!(outside.count() > 20, "{name}");
                    }
                    Plain if cell.kind != Ember => {
                        let (late, top) = late_and_top(cell);
                        let ceiling = 1000.0 / cell.cell.membrane.refractory_ms;
                        assert!(
                            top > 0.65 * ceiling && top < ceiling,
                            "{name}: {top} of {ceiling} Hz"
                        );
                        assert!(top / late < 1.2, "{name}: saturates, {late} to {top} Hz");
                    }
                    Plain | Unsaturated => {
                        let (late, top) = late_and_top(cell);
                        assert!(
                            top < 0.3 * 1000.0 / cell.cell.membrane.refractory_ms,
                            "{name}: {top} Hz"
                        );
                        assert!(top / late > 1.2, "{name}: goes on rising, {late} to {top} Hz");
                    }
                    _ => {}
                }
                if cell.quirk != DetectedTwice {
                    let shortest = cell
                        .spikes
                        .windows(2)
                        .filter(|pair| pair[0].0 == pair[1].0)
                        .map(|pair| pair[1].1 - pair[0].1)
                        .fold(f64::INFINITY, f64::min);
                    assert!(
                        shortest > cell.cell.membrane.refractory_ms - 1e-9,
                        "{name}: {shortest} ms"
                    );
                }
            }
        }
    }

    #[test]
    fn drift_shows_between_repeats() {
        let set = current_set();
        let cell = set
            .iter()
            .find(|cell| cell.id == "A-07")
            .map(rates)
            .unwrap_or_default();
        let (first, second) = cell.split_at(cell.len() / 2);
        let lower = first
            .iter()
            .zip(second)
            .filter(|(a, b)| **a > 5.0 && a > b)
            .count();
        let higher = first
            .iter()
            .zip(second)
            .filter(|(a, b)| **a > 5.0 && a < b)
            .count();
        assert!(lower > 3 * higher, "{lower} lower, {higher} higher");
    }

    #[test]
    fn a_double_detection_is_a_spike_more() {
        let spikes: Vec<_> = (0..46).map(|i| (Some(1), f64::from(i))).collect();
        let twice = detect_twice(&spikes);
        assert_eq!(twice.len(), 48);
        assert_eq!(twice[23], (Some(1), 22.6));
    }
}
