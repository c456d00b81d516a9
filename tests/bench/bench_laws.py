"""Cost of the model laws against the dense lifted way and against bare FFTs of the same channels.

Run as a script: prints ratios taken in one run, the candidates in turn, and fails where one is
beyond its floor.
"""

import sys
import time
import tracemalloc
from collections.abc import Callable

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft

from trialrunner.core.laws import LawContext
from trialrunner.core.laws.gradient import GradientSettings
from trialrunner.core.laws.inverse import InverseSettings
from trialrunner.core.laws.norm_optimal import FactorSolver
from trialrunner.core.lifted import Lifted
from trialrunner.core.plant_model import PlantModel, StateSpace
from trialrunner.core.trial import Array, Purpose, Trial
from trialrunner.launch import keep_freed_memory

FLOORS = {1: 1.3, 2: 1.5, 6: 2.0}
"""Largest ratio of an update to rfft + irfft of as many channels."""
N_DENSE = 8_000
MIN_FASTER, MIN_LESS_MEMORY = 30.0, 500.0
MAX_SOLVE = 1.5
"""Largest ratio of the norm-optimal solve to one G and one G'."""


def plant_of(n_channels: int) -> PlantModel:
    """A damped oscillation for each channel, weakly coupled through the outputs."""
    n = 2 * n_channels
    a, b, c = np.zeros((n, n)), np.zeros((n, n_channels)), np.zeros((n_channels, n))
    for i in range(n_channels):
        angle, at = 0.2 + 0.05 * i, slice(2 * i, 2 * i + 2)
        turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
        a[at, at] = 0.95 * turn
        b[2 * i, i], c[:, 2 * i], c[i, 2 * i] = 0.1, 0.05, 1.0
    zero = np.zeros((n_channels, n_channels))
    return PlantModel(n_channels, n_channels, StateSpace(a, b, c, zero))


def context_of(plant: PlantModel, n: int) -> LawContext:
    m, limits = plant.n_inputs, np.full(plant.n_inputs, np.inf)
    return LawContext(0.001, n, m, m, np.zeros((n, m)), -limits, limits, limits, plant)


def trial_of(n: int, m: int) -> Trial:
    error = np.random.default_rng(0).normal(size=(n, m))
    limited = np.zeros((n, m), dtype=bool)
    return Trial(0, Purpose.LEARN, error, error, 0 * error, np.zeros((n, 0)), limited, np.zeros(m))


def medians(*candidates: Callable[[], object], repeats: int = 41) -> list[float]:
    """Median seconds of each, run in turn so that the machine's moods meet all of them."""
    times = np.empty((repeats, len(candidates)))
    for row in times:
        for column, candidate in enumerate(candidates):
            start = time.perf_counter()
            candidate()
            row[column] = time.perf_counter() - start
    return [float(one) for one in np.median(times, axis=0)]


def against_dense() -> bool:
    plant, n = plant_of(1), N_DENSE
    context, trial = context_of(plant, n), trial_of(n, 1)
    tracemalloc.start()
    law = GradientSettings().build(context)
    law.update(trial, 1.0, {}, {})
    structured = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    h = plant.impulse_response(n)[:, 0, 0]
    matrix = np.zeros((n, n))
    for row in range(n):
        matrix[: row + 1, row] = law.factor * h[row::-1]
    u, e = trial.feedforward[:, 0], trial.error[:, 0]
    fast, slow = medians(lambda: law.update(trial, 1.0, {}, {}), lambda: u + matrix @ e, repeats=15)
    faster, less = slow / fast, matrix.nbytes / structured
    print(f"update, N = {n}: {faster:.0f} times faster than dense (floor {MIN_FASTER:.0f})")
    print(f"  peak memory, building included: {less:.0f} times less (floor {MIN_LESS_MEMORY:.0f})")
    return faster >= MIN_FASTER and less >= MIN_LESS_MEMORY


def bare(signal: Array) -> Callable[[], object]:
    n_fft = next_fast_len(2 * len(signal) - 1, real=True)
    channels = np.ascontiguousarray(signal.T)
    return lambda: irfft(rfft(channels, n_fft), n_fft)


def against_ffts(m: int, n: int) -> bool:
    context, trial = context_of(plant_of(m), n), trial_of(n, m)
    gradient, inverse = GradientSettings().build(context), InverseSettings().build(context)
    floor, *found = medians(
        bare(trial.error),
        lambda: gradient.update(trial, 1.0, {}, {}),
        lambda: inverse.update(trial, 1.0, {}, {}),
        repeats=41 if n * m < 100_000 else 9,
    )
    ratios = [one / floor for one in found]
    print(
        f"{m} x {m}, N = {n}: gradient {ratios[0]:.2f}, inverse {ratios[1]:.2f} times "
        f"rfft + irfft (floor {FLOORS[m]})"
    )
    return max(ratios) <= FLOORS[m]


def norm_optimal(m: int, n: int) -> bool:
    plant, error = plant_of(m), trial_of(n, m).error
    assert plant.state_space is not None
    solver = FactorSolver(plant.state_space, np.ones(m), np.full(m, 1e-3), n)
    lifted = Lifted(plant.impulse_response(n))
    products, solve = medians(
        lambda: lifted.adjoint(lifted.apply(error)), lambda: solver.solve(error), repeats=15
    )
    step, right = solver.solve(error), lifted.adjoint(error)
    rest = lifted.adjoint(lifted.apply(step)) + 1e-3 * step - right
    residual = float(np.linalg.norm(rest) / np.linalg.norm(right))
    print(
        f"norm-optimal {m} x {m}, N = {n}: {solve / products:.2f} times one G and one G' "
        f"(floor {MAX_SOLVE}), residual {residual:.1e}"
    )
    return solve / products <= MAX_SOLVE and residual <= 1e-10


def main() -> int:
    keep_freed_memory()
    held = [against_dense()]
    held += [against_ffts(m, n) for m in FLOORS for n in (10_000, 100_000)]
    held += [norm_optimal(m, n) for m in (1, 2) for n in (10_000, 100_000)]
    return 0 if all(held) else 1


if __name__ == "__main__":
    sys.exit(main())
