#!/usr/bin/env python3
"""Makes a recording set of cells with known rate functions, as Parquet, for benches and for coverage studies.

Each cell gets one sweep a step. Spikes are an equilibrium gamma renewal process (the spacing before the first spike is
that of a process under way) at the rate of the smoothed hyperbola, or of the smoothed ramp with --ramp:

    rate = R E[H((drive - threshold + noise X)/K)], H(u) = u/(1+u) for u > 0 and 0 otherwise, X standard normal

Drawn uniformly: R 40-200 Hz, K 50-400 pA, threshold 50-250 pA, noise SD 5-60 pA, 20-80 steps (or --steps) evenly from 0
to where the curve reaches 35-95 % of R, gamma shape 4-20. Ramps: up to 200-800 pA above threshold, where the rate is
45-75 Hz. A cell depends on the seed, its number and the options only, so that a smaller set is the beginning of a
larger one.

Writes spikes.parquet (cell, sweep, time in s), sorted, and protocol.parquet (cell, sweep, onset, offset in s, current
in pA). Times are whole multiples of 10 us, no two alike in a sweep. The truth goes to a file outside the set, by default
beside it (OUT-truth.parquet), for nobody but the judge. Needs numpy, scipy, pyarrow.

    python make_set.py OUT --cells 1000 --steps 40
    python make_set.py OUT --cells 300 --steps 20:80 --truth TRUTH.parquet
"""
import argparse
import pathlib

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from scipy.special import ndtr

TICKS_PER_S = 100_000
ONSET_S = 0.2
NODES, WEIGHTS = np.polynomial.legendre.leggauss(96)


def smoothed_hyperbola(z, s):
    """h(z, s) by one Gauss-Legendre panel in t = ln(1+u); good to far better than any rate is measured."""
    z = np.asarray(z, float)[:, None]
    low, high = np.maximum(0.0, z - 9 * s), z + 9 * s
    low = np.minimum(low, np.maximum(high, 0.0))
    first, last = np.log1p(low), np.log1p(np.maximum(high, 0.0))
    t = first + (last - first) * (NODES + 1) / 2
    u = np.expm1(t)
    xi = (u - z) / s
    return np.sum(WEIGHTS * (last - first) / 2 * u * np.exp(-xi * xi / 2), axis=1) / (s * np.sqrt(2 * np.pi))


def smoothed_ramp(x, sigma):
    """E[(x + sigma X)+]."""
    return x * ndtr(x / sigma) + sigma * np.exp(-0.5 * (x / sigma) ** 2) / np.sqrt(2 * np.pi)


def draw_cell(seed, number, arguments):
    """One cell: its truth, drives, true rates and the generator that goes on to its spikes."""
    random = np.random.default_rng([seed, number])
    threshold, noise, shape = random.uniform(50, 250), random.uniform(5, 60), random.uniform(4, 20)
    fewest, most = arguments.steps
    steps = fewest if fewest == most else int(random.integers(fewest, most + 1))
    if arguments.ramp:
        last, reach = random.uniform(45, 75), random.uniform(200, 800)
        gain = last / reach * arguments.max_rate_scale
        drives = np.linspace(0.0, threshold + reach, steps)
        rates = gain * smoothed_ramp(drives - threshold, noise)
        top, half, reached = None, None, None
    else:
        top, half, reached = random.uniform(40, 200), random.uniform(50, 400), random.uniform(0.35, 0.95)
        top *= arguments.max_rate_scale
        gain = top / half
        drives = np.linspace(0.0, threshold + half * reached / (1 - reached), steps)
        rates = top * smoothed_hyperbola((drives - threshold) / half, noise / half)
    truth = {
        "max_rate_Hz": top,
        "half_rise": half,
        "threshold": threshold,
        "noise_sd": noise,
        "initial_gain": gain,
        "reached": reached,
        "gamma_shape": shape,
        "steps": steps,
    }
    # A rate cannot be negative: below three SDs the scatter shrinks with it, so that its mean stays the curve's.
    scatter = np.minimum(arguments.extra_sd, rates / 3)
    rates = np.maximum(rates + scatter * random.standard_normal(steps), 0.0)
    return truth, drives, rates, shape, random


def gamma_trains(rates, shape, duration, random):
    """Step index and time after onset, in ticks, of every spike of one cell."""
    expected = rates * duration
    draws = np.ceil(expected + 8 * np.sqrt(expected / shape) + 4).astype(np.int64)
    draws[rates <= 0] = 0
    step = np.repeat(np.arange(len(rates)), draws)
    first = np.cumsum(draws) - draws
    first = first[draws > 0]
    scale = 1 / (shape * np.maximum(rates[step], 1e-300))
    intervals = random.gamma(shape, scale)
    # The interval that covers the onset is longer than most (size-biased), and the onset falls anywhere in it.
    intervals[first] = random.gamma(shape + 1, scale[first]) * random.random(len(first))
    # Longer than the step is as good as infinite, and keeps the running sum exact.
    np.minimum(intervals, 2 * duration, out=intervals)
    total = np.cumsum(intervals)
    before = np.repeat(total[first] - intervals[first], draws[draws > 0])
    times = total - before
    inside = times < duration
    step, times = step[inside], times[inside]
    # Rounded down, so that no spike is moved past the offset. One that shares its tick with the spike before moves to the
    # next tick; the steps lie far enough apart on the common line of ticks for one not to reach into another.
    length = int(2 * duration * TICKS_PER_S) + 1
    order = np.arange(len(step))
    line = np.maximum.accumulate(step * length + (times * TICKS_PER_S).astype(np.int64) - order) + order
    ticks = line - step * length
    inside = ticks < duration * TICKS_PER_S
    return step[inside], ticks[inside]


def step_range(text):
    """Fewest and most steps from `40` or `20:80`."""
    fewest, _, most = text.partition(":")
    fewest, most = int(fewest), int(most or fewest)
    if not 2 <= fewest <= most:
        raise argparse.ArgumentTypeError(f"{text}: wanted a number of steps from 2 up, or FEWEST:MOST")
    return fewest, most


def positive(text):
    """A finite number above zero."""
    number = float(text)
    if not 0 < number < np.inf:
        raise argparse.ArgumentTypeError(f"{text}: wanted a finite number above zero")
    return number


def main():
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("out", type=pathlib.Path, help="folder of the new recording set")
    parser.add_argument("--cells", type=int, default=1000)
    parser.add_argument(
        "--steps", type=step_range, default=(20, 80), help="steps a cell, or FEWEST:MOST to draw them; default 20:80"
    )
    parser.add_argument("--ramp", action="store_true", help="cells without a ceiling")
    parser.add_argument("--max-rate-scale", type=positive, default=1.0, help="multiplies all rates, for more or fewer spikes")
    parser.add_argument("--truth", type=pathlib.Path, help="file of the true parameters; default OUT-truth.parquet beside OUT")
    parser.add_argument("--step-s", type=positive, default=1.0, help="length of a step, s")
    parser.add_argument("--spikes-per-step", type=positive, help="lengthen or shorten each cell's steps to this mean count")
    parser.add_argument("--extra-sd", type=float, default=0.0, help="scatter between steps beyond interval noise, Hz")
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args()
    folder = arguments.out.resolve()
    truth_file = arguments.truth or folder.with_name(folder.name + "-truth.parquet")
    if folder in truth_file.resolve().parents:
        parser.error(f"--truth {truth_file}: outside the set, where no reader takes it for a table of it")
    arguments.out.mkdir(parents=True, exist_ok=True)
    truth_file.parent.mkdir(parents=True, exist_ok=True)

    digits = max(4, len(str(arguments.cells)))
    names = [f"cell-{number:0{digits}d}" for number in range(1, arguments.cells + 1)]
    schema_spikes = pa.schema([("cell", pa.string()), ("sweep", pa.int32()), ("time", pa.float64())])
    schema_protocol = pa.schema(
        [("cell", pa.string()), ("sweep", pa.int32()), ("onset", pa.float64()), ("offset", pa.float64()), ("current", pa.float64())]
    )
    options = dict(compression="zstd", use_dictionary=["cell"])
    truths, spikes_written = [], 0
    block = 256
    with (
        pq.ParquetWriter(arguments.out / "spikes.parquet", schema_spikes, **options) as spike_file,
        pq.ParquetWriter(arguments.out / "protocol.parquet", schema_protocol, **options) as protocol_file,
    ):
        for start in range(0, arguments.cells, block):
            cells, sweeps, times = [], [], []
            protocol = [[], [], [], [], []]
            for number in range(start, min(start + block, arguments.cells)):
                truth, drives, rates, shape, random = draw_cell(arguments.seed, number, arguments)
                duration = arguments.step_s
                if arguments.spikes_per_step:
                    duration = arguments.spikes_per_step / rates.mean()
                step, ticks = gamma_trains(rates, shape, duration, random)
                truths.append({"cell": names[number], **truth, "step_s": duration})
                cells.append(np.full(len(step), number))
                sweeps.append(step.astype(np.int32) + 1)
                times.append((round(ONSET_S * TICKS_PER_S) + ticks) / TICKS_PER_S)
                protocol[0].append(np.full(len(drives), number))
                protocol[1].append(np.arange(1, len(drives) + 1, dtype=np.int32))
                protocol[2].append(np.full(len(drives), ONSET_S))
                protocol[3].append(np.full(len(drives), ONSET_S + duration))
                protocol[4].append(drives)
            cells, sweeps, times = map(np.concatenate, (cells, sweeps, times))
            protocol = [np.concatenate(column) for column in protocol]
            spikes_written += len(times)
            dictionary = pa.array(names)
            spike_file.write_table(pa.table([dictionary.take(pa.array(cells)), sweeps, times], schema=schema_spikes))
            protocol_file.write_table(
                pa.table([dictionary.take(pa.array(protocol[0])), *protocol[1:]], schema=schema_protocol)
            )
    pq.write_table(pa.Table.from_pylist(truths), truth_file)
    print(f"{arguments.cells} cells, {sum(t['steps'] for t in truths)} steps, {spikes_written} spikes")


if __name__ == "__main__":
    main()
