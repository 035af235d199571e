#!/usr/bin/env python3
"""The same job as `halfrise fit` without confidence intervals, as an expert would script it with pandas and SciPy.

It is the yardstick of the speed figures: interval rates vectorised over the whole set, standard errors from the cell's
median interval CV, additive variance iterated with the curve, six starts of MINPACK's Levenberg-Marquardt with analytic
Jacobian on a 64-node quadrature, two processes. Writes one Parquet table of parameters.

The solver is called through `leastsq`, the call with the least overhead, so that the yardstick is not slower than it
need be. --solver lm and --solver trf go through `least_squares` instead, with its methods of those names.

    python script.py SET OUT.parquet --responses whole,steady,onset --processes 2
"""
import argparse
import multiprocessing
import os
import pathlib
import time

# One thread a process: the arrays are small.
for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(variable, "1")

import numpy as np
import pandas as pd
from scipy.optimize import least_squares, leastsq

NODES, WEIGHTS = np.polynomial.legendre.leggauss(64)
UNIT = (NODES + 1) / 2
HALF_WEIGHTS = WEIGHTS / 2
ROOT_TWO_PI = np.sqrt(2 * np.pi)


def table(folder, stem):
    for suffix, reader in ((".parquet", pd.read_parquet), (".csv", pd.read_csv)):
        path = folder / (stem + suffix)
        if path.exists():
            return reader(path)
    raise SystemExit(f"no {stem}.parquet or {stem}.csv in {folder}")


def read(folder):
    """Steps sorted by cell, sweep, onset, and the times of the spikes inside them, by step and time."""
    spikes, steps = table(folder, "spikes"), table(folder, "protocol")
    cell_codes, cells = pd.factorize(steps["cell"], sort=True)
    spike_cells = pd.Index(cells).get_indexer(spikes["cell"])
    if "sweep" in steps:
        step_sweeps, sweeps = pd.factorize(steps["sweep"], sort=True)
        spike_sweeps = pd.Index(sweeps).get_indexer(spikes["sweep"])
    else:
        step_sweeps, spike_sweeps, sweeps = np.zeros(len(steps), int), np.zeros(len(spikes), int), [0]
    # One integer key a cell and sweep; a spike of neither is dropped.
    known = (spike_cells >= 0) & (spike_sweeps >= 0)
    step_key = cell_codes * len(sweeps) + step_sweeps
    spike_key = (spike_cells * len(sweeps) + spike_sweeps)[known]
    times = spikes["time"].to_numpy()[known]
    order = np.lexsort((steps["onset"].to_numpy(), step_key))
    steps, step_key, cell_codes = steps.iloc[order], step_key[order], cell_codes[order]
    onset, offset = steps["onset"].to_numpy(), steps["offset"].to_numpy()
    drive = steps["current" if "current" in steps else "g_exc"].to_numpy(float)
    if not (np.all(spike_key[1:] >= spike_key[:-1]) and np.all((times[1:] >= times[:-1]) | (spike_key[1:] > spike_key[:-1]))):
        order = np.lexsort((times, spike_key))
        spike_key, times = spike_key[order], times[order]
    # Both in one number: the time line of every key laid behind that of the one before.
    low = min(onset.min(), times.min() if len(times) else 0.0)
    length = max(offset.max(), times.max() if len(times) else 0.0) - low + 1.0
    position = np.searchsorted(step_key * length + (onset - low), spike_key * length + (times - low), side="right") - 1
    inside = (position >= 0) & (step_key[position] == spike_key) & (times < offset[position])
    return cells, cell_codes, onset, offset, drive, position[inside], times[inside]


def interval_rates(step, times, start, end, cell_codes, cell_count, cell_cv=None):
    """Rate, standard error and interval count of every step; the cells' interval CV unless given."""
    steps = len(start)
    count = np.bincount(step, minlength=steps)
    last = np.cumsum(count) - 1
    first = last - count + 1
    some = count >= 2
    span = np.zeros(steps)
    span[some] = times[last[some]] - times[first[some]]
    if cell_cv is None:
        same = step[1:] == step[:-1]
        x, of = np.diff(times)[same], step[1:][same]
        n = np.maximum(count - 1, 0)
        i = np.arange(len(x)) - np.repeat(np.cumsum(n) - n, n) - np.repeat((n - 1) / 2, n)
        s1, s2 = np.bincount(of, x, steps), np.bincount(of, x * x, steps)
        cross = np.bincount(of, i * x, steps)
        with np.errstate(all="ignore"):
            mean = s1 / n
            spread = n * (n.astype(float) ** 2 - 1) / 12
            squares = np.maximum(s2 - n * mean**2 - cross**2 / spread, 0)
            cv = np.sqrt(squares / (n - 2)) / mean
        enough = n >= 5
        medians = pd.Series(cv[enough]).groupby(cell_codes[enough]).median()
        cell_cv = medians.reindex(range(cell_count)).fillna(1.0).to_numpy()
    duration = end - start
    one_count = 1 / (np.sqrt(12) * duration)
    with np.errstate(all="ignore"):
        rate = np.where(some, (count - 1) / span, np.where(count == 1, 1 / duration, 0.0))
        se = np.where(some, rate * cell_cv[cell_codes] / np.sqrt(count - 1), one_count)
    return rate, np.maximum(se, np.sqrt(0.05) * one_count), np.maximum(count - 1, 0), cell_cv


class Curve:
    """Weighted residuals and Jacobian by (ln R, ln K, threshold, ln noise); one quadrature serves both."""

    def __init__(self, drive, rate, solver):
        self.drive, self.rate, self.solver, self.key = drive, rate, solver, None

    def evaluate(self, p):
        key = p.tobytes()
        if key == self.key:
            return
        self.key = key
        # An overflow here would only be a step that MINPACK takes back.
        top, half, noise = np.exp(np.clip(p[[0, 1, 3]], -30, 30))
        s = noise / half
        z = (self.drive - p[2]) / half
        low = np.log1p(np.maximum(0.0, z - 8 * s))
        reach = 70 * s * s
        length = np.log1p(np.where(z > 0, z + 8 * s, reach / (np.abs(z) + np.sqrt(z * z + reach)))) - low
        t = low[:, None] + length[:, None] * UNIT
        grown = np.exp(t)
        u = grown - 1
        xi = (u - z[:, None]) / s
        mass = np.exp(-0.5 * xi * xi) / grown
        scale = length / (s * ROOT_TWO_PI)
        dz = mass @ HALF_WEIGHTS
        mass *= u
        bend = mass @ HALF_WEIGHTS
        mass *= u
        excess = mass @ HALF_WEIGHTS
        dz, bend, excess = scale * dz, scale * bend, scale * excess
        self.fitted = top * (bend + excess)
        self.jacobian = np.array([self.fitted, -top * bend, -top / half * dz, top * (bend - z * dz)])

    def residuals(self, p, weight):
        self.evaluate(p)
        return weight * (self.fitted - self.rate)

    def derivatives(self, p, weight):
        self.evaluate(p)
        return weight * self.jacobian

    def fit(self, start, weight, ftol, xtol, maxfev):
        if self.solver != "leastsq":
            found = least_squares(
                self.residuals,
                start,
                lambda p, weight: self.derivatives(p, weight).T,
                method=self.solver,
                x_scale="jac",
                ftol=ftol,
                xtol=xtol,
                max_nfev=maxfev,
                args=(weight,),
            )
            return 2 * found.cost, found.x, found.status > 0
        p, _, info, _, flag = leastsq(
            self.residuals,
            start,
            (weight,),
            self.derivatives,
            full_output=True,
            col_deriv=True,
            ftol=ftol,
            xtol=xtol,
            maxfev=maxfev,
        )
        return float(info["fvec"] @ info["fvec"]), p, flag in (1, 2, 3, 4)


def extra_variance(residual, se, degrees):
    """w^2 >= 0 with sum r^2/(se^2 + w^2) = degrees."""
    variance = 0.0
    for _ in range(100):
        inverse = 1 / (se * se + variance)
        total = np.sum(residual**2 * inverse)
        step = (total / degrees - 1) * total / np.sum((residual * inverse) ** 2)
        if step <= 1e-12 * variance:
            break
        variance += step
    return variance


def fit_cell(job):
    """Six starts at provisional weights, the best followed while curve and additive variance take turns."""
    drive, rate, se, intervals, solver = job
    unknown = [np.nan] * 6
    if np.count_nonzero(intervals) < 3 or len(drive) < 5 or len(np.unique(drive)) < 4:
        return unknown, False
    curve = Curve(drive, rate, solver)
    peak, span = rate.max(), np.ptp(drive)
    firing = drive[rate > 0.1 * peak].min()
    weight = 1 / np.sqrt(se**2 + (0.05 * peak) ** 2)
    starts = [
        np.array([np.log(top * peak), np.log(half * (drive.max() - firing) + 1e-3 * span), firing - shift * span, np.log(noise * span)])
        for top, half, shift, noise in (
            (1.2, 0.2, 0.0, 0.05),
            (1.6, 0.6, 0.0, 0.05),
            (3.0, 2.0, 0.0, 0.05),
            (1.4, 0.4, 0.1, 0.02),
            (1.6, 0.6, 0.05, 0.15),
            (10.0, 9.0, 0.05, 0.05),
        )
    ]
    with np.errstate(all="ignore"):
        rough = [curve.fit(start, weight, ftol=1e-4, xtol=1e-4, maxfev=40) for start in starts]
        _, p, _ = min(rough, key=lambda r: r[0])
        variance, converged = -1.0, False
        for _ in range(30):
            curve.evaluate(p)
            new = extra_variance(rate - curve.fitted, se, len(rate) - 4)
            settled = variance >= 0 and abs(new - variance) <= 1e-5 * (new + np.mean(se**2))
            variance = new
            cost, p, converged = curve.fit(p, 1 / np.sqrt(se**2 + variance), ftol=1e-9, xtol=1e-9, maxfev=200)
            if settled:
                break
    top, half, noise = np.exp(p[[0, 1, 3]])
    return [top, half, p[2], noise, np.sqrt(variance), cost], converged and settled


def main():
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("set", type=pathlib.Path)
    parser.add_argument("out", type=pathlib.Path)
    parser.add_argument("--responses", default="whole")
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--solver", choices=("leastsq", "lm", "trf"), default="leastsq")
    arguments = parser.parse_args()
    begun = time.perf_counter()
    cells, cell_codes, onset, offset, drive, step, times = read(arguments.set)
    rank = np.arange(len(step)) - np.searchsorted(step, step, side="left")
    bounds = np.searchsorted(cell_codes, np.arange(len(cells) + 1))
    cell_cv, jobs, labels = None, [], []
    _, _, _, cell_cv = interval_rates(step, times, onset, offset, cell_codes, len(cells))
    for response in arguments.responses.split(","):
        start = (onset + offset) / 2 if response == "steady" else onset
        keep = {"whole": np.ones(len(step), bool), "steady": times >= start[step], "onset": rank < 2}[response]
        rate, se, intervals, _ = interval_rates(step[keep], times[keep], start, offset, cell_codes, len(cells), cell_cv)
        for number, (a, b) in enumerate(zip(bounds[:-1], bounds[1:])):
            jobs.append((drive[a:b], rate[a:b], se[a:b], intervals[a:b], arguments.solver))
            labels.append((cells[number], response))
    prepared = time.perf_counter()
    if arguments.processes > 1:
        with multiprocessing.Pool(arguments.processes) as pool:
            results = pool.map(fit_cell, jobs, chunksize=max(1, len(jobs) // (16 * arguments.processes)))
    else:
        results = [fit_cell(job) for job in jobs]
    fitted = time.perf_counter()
    columns = ["max_rate_Hz", "half_rise", "threshold", "noise_sd", "extra_sd_Hz", "deviance"]
    out = pd.DataFrame([r[0] for r in results], columns=columns)
    out.insert(0, "cell", [label[0] for label in labels])
    out.insert(1, "response", [label[1] for label in labels])
    out["converged"] = [r[1] for r in results]
    out.to_parquet(arguments.out, compression="zstd")
    done = time.perf_counter()
    print(
        f"{len(cells)} cells, {len(onset)} steps, {len(times)} spikes, {len(jobs)} fits, {int(out['converged'].sum())} converged; "
        f"read and rates {prepared - begun:.2f} s, fits {fitted - prepared:.2f} s, all {done - begun:.2f} s, "
        f"{1000 * (done - begun) / len(cells):.2f} ms a cell"
    )


if __name__ == "__main__":
    main()
