"""How right the trial's estimate is, and how right its own sds are, on movements whose truth is known.

Usage: python benchmarks/trial_estimates.py [TRIALS]

Three tables. Coverage: how often 95 % intervals of value, rate and acceleration hold the truth, for
truths drawn from the prior that is stated and for movements that are not. Against filtering: RMS
errors beside those of frame-by-frame fits with a 6 Hz dual-pass Butterworth filter (order two a pass,
cut-off corrected for two; Winter 2009, Biomechanics and Motor Control of Human Movement, ch. 3).
Pezzack's bar: a measured acceleration (Pezzack, Norman & Winter 1977, J Biomech 10:377), if its
table is at hand (CONDYLE_DATA).

Markers have white noise of their stated sd and no skin movement, so that nothing else can be at fault.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from dataclasses import dataclass
from math import factorial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.signal import butter, filtfilt
from scipy.special import ndtr

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.solver.block_banded import factored, system_band
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.process_evidence import weigh
from condyle.solver.process_prior import ProcessPrior
from condyle.solver.time_derivatives import derivatives
from condyle.solver.trial_estimate import TrialEstimate, smooth_trial

FloatArray = NDArray[np.float64]
RATE, SECONDS, NOISE, MISSING = 100.0, 4.0, 0.001, 0.05
CUTOFF = 6.0


@dataclass(frozen=True)
class Motion:
    """Values, rates and accelerations (frames, scalars) of a movement."""

    values: FloatArray
    rates: FloatArray
    accelerations: FloatArray


Maker = Callable[[FloatArray, FloatArray, np.random.Generator], Motion]
"""(time (frames,), half-ranges (scalars,), rng) -> movement about 0."""


STRIDE = np.array([1.0, 0.8, 0.2, 0.06, 0.03, 0.02, 0.015])
"""Harmonics of a walking knee's angle, relative: Fourier coefficients of the stride in Winter 2009,
table A.1 (hip, knee, fibula and ankle markers), rounded."""


def harmonics(time: FloatArray, size: FloatArray, base: float, relative: FloatArray, rng) -> Motion:
    """Sums of harmonics, each amplitude between 0.5 and 1 of what it is on average."""
    count = len(relative)
    amplitude = size[:, None] * rng.uniform(0.5, 1.0, (len(size), count)) * relative
    phase = rng.uniform(0, 2 * np.pi, (len(size), count))
    w = 2 * np.pi * base * np.arange(1, count + 1)
    angle = w * time[:, None, None] + phase
    return Motion(
        (amplitude * np.sin(angle)).sum(axis=2),
        (amplitude * w * np.cos(angle)).sum(axis=2),
        (-amplitude * w**2 * np.sin(angle)).sum(axis=2),
    )


def walking(time, size, rng) -> Motion:
    """Seven harmonics of a stride of 1.1 s."""
    return harmonics(time, 0.5 * size, 1 / 1.1, STRIDE, rng)


def reach(time, size, rng) -> Motion:
    """Slow: nothing above 1.5 Hz."""
    return harmonics(time, 0.6 * size, 0.3, 1 / np.arange(1, 6) ** 2, rng)


def throw(time, size, rng) -> Motion:
    """Rest, then bursts: two fast swings, each the integral of a bell of 60 to 90 ms sd."""
    values, rates, accelerations = (np.zeros((len(time), len(size))) for _ in range(3))
    for centre, sign in ((0.45 * time[-1], 1.0), (0.6 * time[-1], -1.0)):
        sd = rng.uniform(0.06, 0.09, len(size))
        height = sign * size * rng.uniform(0.5, 0.9, len(size))
        u = (time[:, None] - centre - rng.uniform(-0.05, 0.05, len(size))) / sd
        bell = np.exp(-(u**2) / 2) / (sd * np.sqrt(2 * np.pi))
        rates += height * bell
        accelerations += height * bell * -u / sd
        values += height * ndtr(u)
    slow = harmonics(time, 0.1 * size, 0.4, np.ones(2), rng)
    return Motion(values + slow.values, rates + slow.rates, accelerations + slow.accelerations)


def integrated(order: int, density: float, time: FloatArray, size: FloatArray, rng) -> Motion:
    """White noise integrated `order` times, exactly, less the polynomial that the prior does not see.

    Exact discretisation of the integrated Wiener process: transition dt^(j-i) / (j-i)!, covariance
    dt^(2p-1-i-j) / ((2p-1-i-j) (p-1-i)! (p-1-j)!).
    """
    dt = time[1] - time[0]
    index = range(order)
    F = np.array(
        [[dt ** (j - i) / factorial(j - i) if j >= i else 0 for j in index] for i in index]
    )
    Q = np.array(
        [
            [
                dt ** (2 * order - 1 - i - j)
                / ((2 * order - 1 - i - j) * factorial(order - 1 - i) * factorial(order - 1 - j))
                for j in index
            ]
            for i in index
        ]
    )
    root = np.linalg.cholesky(Q)
    states = [np.zeros((order, len(size)))]
    for _ in time[1:]:
        states.append(
            F @ states[-1] + root @ rng.standard_normal((order, len(size))) * density * size
        )
    stacked = np.stack(states)
    x = time - time.mean()
    fit = np.polynomial.polynomial.polyfit(x, stacked[:, 0], order - 1)
    paths = []
    for i in range(3):
        away = np.polynomial.polynomial.polyval(x, np.polynomial.polynomial.polyder(fit, i))
        paths.append(stacked[:, i] - away.T.reshape(len(time), -1))
    return Motion(*paths)


def white_snap(time, size, rng) -> Motion:
    """Drawn from the prior: snap is white, about as quick as a walk."""
    return integrated(4, 600.0, time, size, rng)


def white_jerk(time, size, rng) -> Motion:
    """Rougher than the prior: jerk is white."""
    return integrated(3, 60.0, time, size, rng)


class Stage:
    """One model and its markers, on which movements are made up and estimated."""

    def __init__(self, model: str) -> None:
        self.functions = SkeletonFunctions(load_skeleton(model))
        self.skeleton = self.functions.skeleton
        self.numbers = sized_numbers(self.skeleton, np.eye(3))
        free = [c for c in self.skeleton.coordinates if c.follows is None]
        limited = [np.isfinite(c.lower) and np.isfinite(c.upper) for c in free]
        self.middle = np.array(
            [
                (c.lower + c.upper) / 2 if both else c.rest
                for c, both in zip(free, limited, strict=True)
            ]
        )
        self.size = np.array(
            [
                (c.upper - c.lower) / 4 if both else 0.3
                for c, both in zip(free, limited, strict=True)
            ]
        )
        held = np.array([c.held is not None for c in free])
        self.middle[held] = [c.held for c in free if c.held is not None]
        self.size[held] = 0.0
        self.moving = np.flatnonzero(~held)

    def trial(self, make: Maker, rng: np.random.Generator) -> tuple[Motion, FrameProblem]:
        """A made-up movement of every coordinate and the markers that saw it."""
        time = np.arange(round(SECONDS * RATE)) / RATE
        motion = make(time, self.size, rng)
        largest = np.abs(motion.values).max(axis=0)
        shrink = np.where(largest > 1.8 * self.size, 1.8 * self.size / np.maximum(largest, 1e-9), 1)
        motion = Motion(*(shrink * a for a in (motion.values, motion.rates, motion.accelerations)))
        motion = Motion(self.middle + motion.values, motion.rates, motion.accelerations)
        balls = len(self.functions.kinematics.freedoms.balls)
        truth = Posture(motion.values, np.tile([1.0, 0, 0, 0], (len(time), balls, 1)))
        places = self.functions.marker_positions(truth, self.numbers)
        places = places + rng.normal(0, NOISE, places.shape)
        seen = rng.random(places.shape[:2]) >= MISSING
        measured = np.where(seen[..., None], places, 0.0)
        return motion, FrameProblem(self.functions, measured, seen / NOISE**2, self.numbers)


def estimated(problem: FrameProblem) -> tuple[FloatArray, TrialEstimate]:
    """Scalars of the frames by themselves, and the trial's estimate."""
    fits = fit_frames(problem)
    estimate = smooth_trial(problem, fits, RATE)
    if estimate is None:
        raise RuntimeError("the trial was not smoothed")
    return fits.posture.scalars, estimate


def butterworth(values: FloatArray) -> FloatArray:
    """Two passes of second order, the cut-off corrected so that both together have it."""
    corrected = CUTOFF / (np.sqrt(2) - 1) ** 0.25
    b, a = butter(2, corrected / (RATE / 2))
    return np.asarray(filtfilt(b, a, values, axis=0, padlen=min(60, len(values) - 1)))


def rms(error: FloatArray) -> FloatArray:
    return np.asarray(np.sqrt((error**2).mean(axis=0)))


def one_row(stage: Stage, make: Maker, trials: int) -> dict[str, FloatArray]:
    """Coverage, sd over RMS error, and gains on filtering, over some trials."""
    found: dict[str, list[FloatArray]] = {}
    count = len(stage.middle)
    turning = np.array([c.unit == "rad" for c in stage.skeleton.coordinates if c.follows is None])
    for trial in range(trials):
        truth, problem = stage.trial(make, np.random.default_rng(1000 + trial))
        raw, estimate = estimated(problem)
        rates, accelerations = derivatives(estimate.fits.posture.scalars, RATE)
        told = (
            ("angle", estimate.fits.posture.scalars, truth.values, estimate.fits.covariance),
            ("rate", rates, truth.rates, estimate.rate_covariance),
            ("accel", accelerations, truth.accelerations, estimate.acceleration_covariance),
        )
        filtered = butterworth(raw)
        by_filter = (
            filtered,
            np.gradient(filtered, 1 / RATE, axis=0),
            np.gradient(np.gradient(filtered, 1 / RATE, axis=0), 1 / RATE, axis=0),
        )
        for (name, values, true, covariance), other in zip(told, by_filter, strict=True):
            sd = np.sqrt(np.einsum("nii->ni", covariance)[:, :count])
            told_at_all = ~estimate.fits.involved[:, :count].any(axis=0)
            use = stage.moving[(turning & told_at_all)[stage.moving]]
            error = (values - true)[:, use]
            found.setdefault(f"{name} inside", []).append(
                (np.abs(error) <= 1.959964 * sd[:, use]).mean(axis=0)
            )
            found.setdefault(f"{name} sd/rms", []).append(sd[:, use].mean(axis=0) / rms(error))
            found.setdefault(f"{name} gain", []).append(
                1 - rms(error) / rms((other - true)[:, use])
            )
        peak = np.ptp(estimate.fits.posture.scalars[:, use], axis=0) / np.ptp(
            truth.values[:, use], axis=0
        )
        found.setdefault("peak", []).append(peak)
        found.setdefault("order", []).append(np.array([estimate.evidence.order]))
    return {name: np.concatenate(several) for name, several in found.items()}


def pezzack(path: Path) -> str:
    """Second derivative of the noisy column beside the measured acceleration."""
    table = np.genfromtxt(path, delimiter=",", names=True)
    rate = 1 / float(np.median(np.diff(table["time_s"])))
    noisy = table["noisy_angle_rad"][:, None]
    seen = np.ones(noisy.shape, dtype=bool)
    evidence = weigh(noisy, np.ones_like(noisy), seen, least_kappa=1e-6)
    windows = len(noisy) - evidence.order
    prior = ProcessPrior(evidence.order, evidence.ratio, np.ones((windows, 1), dtype=bool))
    band = system_band(np.ones((len(noisy), 1, 1)), prior, np.zeros((0, 0, 0, 3, 3)))
    factor = factored(band)
    if factor is None:
        raise RuntimeError("not positive definite")
    _, found = derivatives(factor.solve(noisy[:, 0]), rate)
    measured = table["measured_acceleration_rad_s2"]
    middle = slice(5, -5)
    r = np.corrcoef(found[middle], measured[middle])[0, 1]
    error = np.sqrt(np.mean((found[middle] - measured[middle]) ** 2))
    return f"order {evidence.order}, r {r:.3f} (0.97), RMSE {error:.2f} rad/s2 (6)"


def main() -> None:
    trials = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    rows = (
        ("white snap, the prior itself", white_snap),
        ("white jerk, a rougher one", white_jerk),
        ("walking, seven harmonics", walking),
        ("reach below 1.5 Hz", reach),
        ("throw, with bursts", throw),
    )
    stage = Stage("lower_limbs")
    print(
        f"lower_limbs, every coordinate moving; {trials} trials of {SECONDS:g} s a row, noise "
        f"{1000 * NOISE:g} mm, {100 * MISSING:g} % missing"
    )
    print(f"{'movement':30s} {'':8s} {'inside 95 %':>12s} {'sd / RMS':>10s} {'gain on 6 Hz':>13s}")
    for name, make in rows:
        row = one_row(stage, make, trials)
        for quantity in ("angle", "rate", "accel"):
            print(
                f"{name:30s} {quantity:8s} {100 * row[f'{quantity} inside'].mean():10.1f} % "
                f"{np.median(row[f'{quantity} sd/rms']):10.2f} "
                f"{100 * np.median(row[f'{quantity} gain']):11.0f} %"
            )
        print(
            f"{'':30s} range kept {100 * np.median(row['peak']):.1f} %, mean order {row['order'].mean():.2f}"
        )
    table = Path(
        os.environ.get("CONDYLE_DATA", Path(__file__).resolve().parents[2] / "shared/data")
    )
    table = table / "tables" / "pezzack_1977_bar_angle.csv"
    print("Pezzack's bar:", pezzack(table) if table.is_file() else "its table is not at hand")


if __name__ == "__main__":
    main()
