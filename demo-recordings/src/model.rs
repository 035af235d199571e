//! One cell: a leaky integrate-and-fire membrane with refractory period, adaptation and noise.
//!
//! Between spikes
//!
//! ```text
//! C dV/dt = g_leak (E_leak - V) + g_exc (E_exc - V) + g_inh (E_inh - V) + I - w + noise
//! tau_w dw/dt = -w
//! ```
//!
//! Where V reaches the spike threshold a spike is recorded, w grows by a fixed amount, and V is held at the reset
//! potential for the refractory period. (Stein 1967; Dayan & Abbott 2001, ch. 5; the adaptation current as in
//! Benda & Herz 2003.)

use rand_chacha::ChaCha12Rng;
use rand_distr::{Distribution, StandardNormal};

/// Time step of the simulation, ms. Spike times are interpolated within it.
pub const TIME_STEP_MS: f64 = 0.025;

/// The passive membrane and its spike.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Membrane {
    /// Capacitance, pF.
    pub capacitance_pf: f64,
    /// Leak conductance, nS.
    pub g_leak_ns: f64,
    /// Leak reversal potential, mV.
    pub e_leak_mv: f64,
    /// Spike threshold, mV.
    pub v_threshold_mv: f64,
    /// Potential to which a spike resets the membrane, mV.
    pub v_reset_mv: f64,
    /// Absolute refractory period, ms; more than one [`TIME_STEP_MS`].
    pub refractory_ms: f64,
}

impl Membrane {
    /// Membrane time constant at rest, ms.
    pub fn time_constant_ms(&self) -> f64 {
        self.capacitance_pf / self.g_leak_ns
    }
}

/// Spike-frequency adaptation: a hyperpolarising current that every spike feeds.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Adaptation {
    /// What one spike adds to the current, pA.
    pub step_pa: f64,
    /// Time constant of its decay, ms.
    pub decay_ms: f64,
}

/// Fluctuations of the input.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Noise {
    /// None.
    Off,
    /// White current noise, told by the standard deviation of V it causes in the resting membrane without spikes.
    White {
        /// Standard deviation, mV.
        sd_mv: f64,
    },
    /// Current noise with an exponential autocorrelation (Ornstein & Uhlenbeck 1930).
    Coloured {
        /// Standard deviation, pA.
        sd_pa: f64,
        /// Correlation time, ms.
        correlation_ms: f64,
    },
}

/// Depolarisation block: the spike threshold climbs behind a lasting depolarisation.
///
/// A filtered copy of the potential the input would lead to without spikes, so of the plateau under the spikes, pushes
/// the threshold up once it is above a limit. With a slope above 1 the threshold outruns the membrane and spiking
/// fades with growing input. This is the threshold effect of sodium channel inactivation in its simplest form
/// (threshold and inactivation: Platkiewicz & Brette 2010).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Block {
    /// Plateau potential above which the threshold climbs, mV.
    pub above_mv: f64,
    /// mV of threshold per mV of plateau.
    pub slope: f64,
    /// Time constant with which the threshold follows, ms.
    pub follow_ms: f64,
}

/// A cell.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Cell {
    /// Membrane and spike.
    pub membrane: Membrane,
    /// Excitatory reversal potential, mV.
    pub e_exc_mv: f64,
    /// Inhibitory reversal potential, mV.
    pub e_inh_mv: f64,
    /// Spike-frequency adaptation.
    pub adaptation: Adaptation,
    /// Fluctuations of the input.
    pub noise: Noise,
    /// Depolarisation block, where the cell has it.
    pub block: Option<Block>,
}

/// What is injected, constant for a while.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Input {
    /// Current, pA.
    pub current_pa: f64,
    /// Excitatory conductance, nS.
    pub g_exc_ns: f64,
    /// Inhibitory conductance, nS.
    pub g_inh_ns: f64,
}

impl Input {
    /// A current in pA.
    pub fn current(current_pa: f64) -> Self {
        Self {
            current_pa,
            ..Self::default()
        }
    }

    /// Excitatory and inhibitory conductance in nS.
    pub fn conductance(g_exc_ns: f64, g_inh_ns: f64) -> Self {
        Self {
            g_exc_ns,
            g_inh_ns,
            ..Self::default()
        }
    }
}

/// A cell in the middle of a recording.
pub struct Simulation<'a> {
    cell: Cell,
    random: &'a mut ChaCha12Rng,
    steps_done: u64,
    v_mv: f64,
    adaptation_pa: f64,
    noise_pa: f64,
    plateau_mv: f64,
    refractory_left_ms: f64,
}

impl<'a> Simulation<'a> {
    /// A cell at rest at time 0, with the random numbers its noise takes.
    pub fn at_rest(cell: Cell, random: &'a mut ChaCha12Rng) -> Self {
        let noise_pa = match cell.noise {
            Noise::Coloured { sd_pa, .. } => sd_pa * normal(random),
            Noise::White { .. } | Noise::Off => 0.0,
        };
        Self {
            cell,
            random,
            steps_done: 0,
            v_mv: cell.membrane.e_leak_mv,
            adaptation_pa: 0.0,
            noise_pa,
            plateau_mv: cell.membrane.e_leak_mv,
            refractory_left_ms: 0.0,
        }
    }

    /// Moves the leak reversal potential, which is how excitability drifts.
    pub fn set_rest(&mut self, e_leak_mv: f64) {
        self.cell.membrane.e_leak_mv = e_leak_mv;
    }

    /// Time since the start, ms.
    pub fn now_ms(&self) -> f64 {
        self.steps_done as f64 * TIME_STEP_MS
    }

    /// Runs to `until_ms` (rounded to whole time steps) under `input` and appends the spike times, in ms since the
    /// start, to `spikes_ms`.
    ///
    /// V is advanced by the exact solution for constant input, so a cell without adaptation and noise follows its
    /// closed form up to the linear interpolation of the threshold crossing.
    pub fn run(&mut self, input: Input, until_ms: f64, spikes_ms: &mut Vec<f64>) {
        let Cell {
            membrane,
            adaptation,
            noise,
            block,
            ..
        } = self.cell;
        let g_total_ns = membrane.g_leak_ns + input.g_exc_ns + input.g_inh_ns;
        let pull_pa = membrane.g_leak_ns * membrane.e_leak_mv
            + input.g_exc_ns * self.cell.e_exc_mv
            + input.g_inh_ns * self.cell.e_inh_mv
            + input.current_pa;
        let time_constant_ms = membrane.capacitance_pf / g_total_ns;
        let keep_v = decay(TIME_STEP_MS, time_constant_ms);
        let keep_adaptation = decay(TIME_STEP_MS, adaptation.decay_ms);
        let keep_plateau = block.map_or(0.0, |block| decay(TIME_STEP_MS, block.follow_ms));
        let white_mv = match noise {
            Noise::White { sd_mv } => {
                sd_mv * (1.0 - decay(2.0 * TIME_STEP_MS, membrane.time_constant_ms())).sqrt()
            }
            Noise::Coloured { .. } | Noise::Off => 0.0,
        };
        let coloured = match noise {
            Noise::Coloured {
                sd_pa,
                correlation_ms,
            } => {
                let keep = decay(TIME_STEP_MS, correlation_ms);
                Some((keep, sd_pa * (1.0 - keep * keep).sqrt()))
            }
            Noise::White { .. } | Noise::Off => None,
        };
        let last = (until_ms / TIME_STEP_MS).round() as u64;
        while self.steps_done < last {
            let mut jump_mv = if white_mv > 0.0 {
                white_mv * normal(self.random)
            } else {
                0.0
            };
            if let Some((keep, sd_pa)) = coloured {
                self.noise_pa = keep * self.noise_pa + sd_pa * normal(self.random);
            }
            let mut threshold_mv = membrane.v_threshold_mv;
            if let Some(block) = block {
                let plateau_mv = pull_pa / g_total_ns;
                self.plateau_mv = plateau_mv + (self.plateau_mv - plateau_mv) * keep_plateau;
                threshold_mv += block.slope * (self.plateau_mv - block.above_mv).max(0.0);
            }
            let goal_mv = (pull_pa - self.adaptation_pa + self.noise_pa) / g_total_ns;
            self.adaptation_pa *= keep_adaptation;
            let start_ms = self.now_ms();
            self.steps_done += 1;

            // The free part of the time step: all of it, unless the refractory period ends within.
            let mut free_ms = TIME_STEP_MS;
            let mut keep = keep_v;
            if self.refractory_left_ms > 0.0 {
                if self.refractory_left_ms >= TIME_STEP_MS {
                    self.refractory_left_ms -= TIME_STEP_MS;
                    continue;
                }
                free_ms -= self.refractory_left_ms;
                self.refractory_left_ms = 0.0;
                keep = decay(free_ms, time_constant_ms);
                jump_mv *= (free_ms / TIME_STEP_MS).sqrt();
            }
            let before_mv = self.v_mv;
            self.v_mv = goal_mv + (before_mv - goal_mv) * keep + jump_mv;
            if self.v_mv < threshold_mv {
                continue;
            }
            let crossed = ((threshold_mv - before_mv) / (self.v_mv - before_mv)).clamp(0.0, 1.0);
            // A threshold that came down onto a still membrane gives 0/0; the crossing is then the start.
            let crossed = if crossed.is_nan() { 0.0 } else { crossed };
            let since_ms = free_ms * (1.0 - crossed);
            spikes_ms.push(start_ms + TIME_STEP_MS - since_ms);
            self.v_mv = membrane.v_reset_mv;
            self.adaptation_pa += adaptation.step_pa;
            self.refractory_left_ms = membrane.refractory_ms - since_ms;
        }
    }
}

fn decay(time_ms: f64, time_constant_ms: f64) -> f64 {
    (-time_ms / time_constant_ms).exp()
}

fn normal(random: &mut ChaCha12Rng) -> f64 {
    StandardNormal.sample(random)
}

#[cfg(test)]
mod tests {
    use rand_chacha::rand_core::SeedableRng;

    use super::*;

    fn plain() -> Cell {
        Cell {
            membrane: Membrane {
                capacitance_pf: 150.0,
                g_leak_ns: 10.0,
                e_leak_mv: -70.0,
                v_threshold_mv: -50.0,
                v_reset_mv: -62.0,
                refractory_ms: 7.3,
            },
            e_exc_mv: 0.0,
            e_inh_mv: -75.0,
            adaptation: Adaptation {
                step_pa: 0.0,
                decay_ms: 100.0,
            },
            noise: Noise::Off,
            block: None,
        }
    }

    fn spikes(cell: Cell, input: Input, until_ms: f64) -> Vec<f64> {
        let mut random = ChaCha12Rng::from_seed([7; 32]);
        let mut spikes_ms = Vec::new();
        Simulation::at_rest(cell, &mut random).run(input, until_ms, &mut spikes_ms);
        spikes_ms
    }

    fn rate_hz(spikes_ms: &[f64]) -> f64 {
        1000.0 * (spikes_ms.len() - 1) as f64 / (spikes_ms[spikes_ms.len() - 1] - spikes_ms[0])
    }

    /// Stein (1967); Dayan & Abbott (2001), ch. 5: 1/(t_ref + tau ln((E + R I - V_r)/(E + R I - V_t))).
    #[test]
    fn without_noise_the_rate_is_the_closed_form() {
        let cell = plain();
        let m = cell.membrane;
        for current_pa in [200.5, 210.0, 250.0, 400.0, 900.0, 3000.0] {
            let goal = m.e_leak_mv + current_pa / m.g_leak_ns;
            let expected = 1000.0
                / (m.refractory_ms
                    + m.time_constant_ms() * ((goal - m.v_reset_mv) / (goal - m.v_threshold_mv)).ln());
            let found = rate_hz(&spikes(cell, Input::current(current_pa), 4000.0));
            assert!(
                (found / expected - 1.0).abs() < 2e-6,
                "{current_pa} pA: {found} Hz, not {expected} Hz"
            );
        }
        assert!(
            spikes(cell, Input::current(199.9), 4000.0).is_empty(),
            "rheobase is 10 nS x 20 mV = 200 pA"
        );
    }

    /// The same closed form with the time constant and goal of the membrane under both conductances.
    #[test]
    fn without_noise_the_rate_under_conductance_is_the_closed_form() {
        let cell = plain();
        let m = cell.membrane;
        for (g_exc, g_inh) in [(4.2, 0.0), (8.0, 0.0), (9.1, 10.0), (25.0, 10.0)] {
            let g_total = m.g_leak_ns + g_exc + g_inh;
            let goal = (m.g_leak_ns * m.e_leak_mv + g_inh * cell.e_inh_mv) / g_total;
            let time_constant = m.capacitance_pf / g_total;
            let expected = 1000.0
                / (m.refractory_ms
                    + time_constant * ((goal - m.v_reset_mv) / (goal - m.v_threshold_mv)).ln());
            let found = rate_hz(&spikes(cell, Input::conductance(g_exc, g_inh), 4000.0));
            assert!(
                (found / expected - 1.0).abs() < 2e-6,
                "{g_exc}, {g_inh} nS: {found} Hz, not {expected} Hz"
            );
        }
        assert!(
            spikes(cell, Input::conductance(3.99, 0.0), 4000.0).is_empty(),
            "threshold is 4 nS"
        );
        assert!(
            spikes(cell, Input::conductance(8.99, 10.0), 4000.0).is_empty(),
            "threshold is 9 nS"
        );
    }

    #[test]
    fn no_interval_is_shorter_than_the_refractory_period() {
        for noise in [
            Noise::White { sd_mv: 4.0 },
            Noise::Coloured {
                sd_pa: 300.0,
                correlation_ms: 5.0,
            },
        ] {
            let found = spikes(Cell { noise, ..plain() }, Input::current(5000.0), 20_000.0);
            assert!(found.len() > 2000);
            let shortest = found
                .windows(2)
                .map(|pair| pair[1] - pair[0])
                .fold(f64::INFINITY, f64::min);
            // The noise-free interval is 7.66 ms; noise comes closer to the limit than that, and never below it.
            assert!((7.3 - 1e-9..7.65).contains(&shortest), "{shortest} ms");
        }
    }

    /// White noise alone: V is an Ornstein-Uhlenbeck process with the stated standard deviation. Coloured noise of
    /// correlation time c: sd_V = R sd_I sqrt(c / (c + tau)).
    #[test]
    fn the_noise_has_the_stated_size() {
        let mut cell = plain();
        cell.membrane.v_threshold_mv = 1000.0;
        let expected_coloured = 40.0 / 10.0 * (5.0_f64 / 20.0).sqrt();
        for (noise, expected) in [
            (Noise::White { sd_mv: 1.5 }, 1.5),
            (
                Noise::Coloured {
                    sd_pa: 40.0,
                    correlation_ms: 5.0,
                },
                expected_coloured,
            ),
        ] {
            let mut random = ChaCha12Rng::from_seed([3; 32]);
            let mut simulation = Simulation::at_rest(Cell { noise, ..cell }, &mut random);
            let (mut sum, mut squares, count) = (0.0, 0.0, 6000);
            for i in 1..=count {
                simulation.run(Input::default(), 50.0 * f64::from(i), &mut Vec::new());
                let v = simulation.v_mv + 70.0;
                sum += v;
                squares += v * v;
            }
            let mean = sum / f64::from(count);
            let sd = (squares / f64::from(count) - mean * mean).sqrt();
            // Three standard errors of a standard deviation from 6000 nearly independent values: 2.7 %.
            assert!((sd / expected - 1.0).abs() < 0.03, "{sd} mV, not {expected} mV");
        }
    }

    /// At rest the adaptation current is the mean w = b tau_w f of its input by spikes, so the steady rate is the
    /// unadapted rate at I - b tau_w f; exact for tau_w much longer than the intervals.
    #[test]
    fn adaptation_settles_where_its_own_rate_feeds_it() {
        let mut cell = plain();
        cell.adaptation = Adaptation {
            step_pa: 2.0,
            decay_ms: 2000.0,
        };
        let found = spikes(cell, Input::current(600.0), 20_000.0);
        let late: Vec<f64> = found.iter().copied().filter(|&t| t > 15_000.0).collect();
        let rate = rate_hz(&late);
        let without = rate_hz(&spikes(plain(), Input::current(600.0 - 2.0 * 2.0 * rate), 4000.0));
        assert!((rate / without - 1.0).abs() < 0.01, "{rate} Hz, {without} Hz");
        let onset = 1000.0 / (found[1] - found[0]);
        let unadapted = rate_hz(&spikes(plain(), Input::current(600.0), 4000.0));
        assert!(
            (onset / unadapted - 1.0).abs() < 0.01,
            "{onset} Hz, {unadapted} Hz"
        );
        assert!(rate < 0.9 * onset, "{rate} Hz of {onset} Hz");
    }

    #[test]
    fn block_silences_strong_input_only() {
        let mut cell = plain();
        cell.block = Some(Block {
            above_mv: -40.0,
            slope: 2.0,
            follow_ms: 4.0,
        });
        let late = |current| {
            spikes(cell, Input::current(current), 2000.0)
                .iter()
                .filter(|&&t| t > 200.0)
                .count()
        };
        // The threshold outruns the plateau where -50 + 2 (V + 40) > V: V > -30 mV, 400 pA.
        assert!(late(300.0) > late(220.0) && late(300.0) > late(380.0));
        assert!(late(395.0) > 0);
        assert_eq!(late(405.0), 0);
        let spared = spikes(cell, Input::current(290.0), 2000.0);
        assert_eq!(
            spared,
            spikes(plain(), Input::current(290.0), 2000.0),
            "no effect below the limit"
        );
    }
}
