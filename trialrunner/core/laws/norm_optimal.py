"""Norm-optimal law: the step that minimises e'We e + u'Wu u + du'Wd du for the next trial.

du = (G'We G + Wu + Wd)^-1 (G'We e - Wu u), e and u of the trial just run (Gunnarsson and Norrlof's
form). Wd sets how fast, Wu what remains: the limit is (G'We G + Wu)^-1 G'We r.

Solved without iteration. P of a discrete Riccati equation completes the square,
We-norm of y + R-norm of u = ||F u||^2 - x_N' P x_N with F causal, so that

    (G'We G + R)^-1 = F^-1 (I + W (I - W'W)^-1 W') F^-T,

where the n columns of W are the way from F u to the root of P times the last state. F^-1 and
G F^-1 are convolutions with the closed loop's impulse response: FFT products, no N x N array.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Literal

import numpy as np

from trialrunner.core.bounds import STRICT, NonNegative, Positive
from trialrunner.core.errors import SettingError
from trialrunner.core.laws import LawContext, Step, required_plant
from trialrunner.core.lifted import Lifted
from trialrunner.core.plant_model import StateSpace, reachability
from trialrunner.core.trial import Array, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class NormOptimalSettings:
    """A norm-optimal law; needs a table [model] of a state space or transfer functions."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["norm_optimal"] = "norm_optimal"
    error_weight: Positive | tuple[Positive, ...] = 1.0
    """We: per squared output unit; one number, or one for each output."""
    input_weight: NonNegative | tuple[NonNegative, ...] = 0.0
    """Wu: per squared input unit; holds the feedforward small and leaves some error."""
    step_weight: Positive | tuple[Positive, ...]
    """Wd: per squared input unit; small learns fast, large learns calmly."""

    def build(self, context: LawContext) -> "NormOptimalLaw":
        """Raises SettingError without a model that fits, or if the weights do not."""
        plant = required_plant(context, self.kind)
        if plant.state_space is None:
            raise SettingError(
                "law.kind: norm_optimal expected a model of kind state_space or transfer_function, "
                "found an impulse response; give one of those, or use the gradient law"
            )
        error = _weights("law.error_weight", self.error_weight, context.n_outputs)
        size = _weights("law.input_weight", self.input_weight, context.n_inputs)
        step = _weights("law.step_weight", self.step_weight, context.n_inputs)
        solver = FactorSolver(plant.state_space, error, size + step, context.n_samples)
        return NormOptimalLaw(solver, size)


def _weights(key: str, value: float | tuple[float, ...], n_channels: int) -> Array:
    found = np.array(value if isinstance(value, tuple) else (value,) * n_channels, np.float64)
    if found.shape != (n_channels,) or not np.all(np.isfinite(found)):
        raise SettingError(
            f"{key}: expected one finite number, or one for each of {n_channels} channels, "
            f"found {value}"
        )
    return found


class FactorSolver:
    """Solves (G' We G + R) d = G' We e - q by its spectral factor; We and R diagonal."""

    def __init__(self, plant: StateSpace, error: Array, effort: Array, n_samples: int) -> None:
        """`error` (n_outputs,), `effort` (n_inputs,) are the diagonals of We and R.

        Raises SettingError if the Riccati equation cannot be solved.
        """
        self._root_error = np.sqrt(error)
        a, b = plant.a, plant.b
        c, d = self._root_error[:, None] * plant.c, self._root_error[:, None] * plant.d
        cost = _cost_to_go(a, b, c, d, effort)
        root = np.linalg.cholesky(np.diag(effort) + d.T @ d + b.T @ cost @ b).T
        feedback = np.linalg.solve(root, np.linalg.solve(root.T, b.T @ cost @ a + d.T @ c))
        per_step = np.linalg.inv(root)
        loop = StateSpace(a - b @ feedback, b @ per_step, c - d @ feedback, d @ per_step)
        states = reachability(loop.a, loop.b, n_samples)
        to_input = np.concatenate((per_step[None], -feedback @ states[:-1]))
        to_output = np.concatenate((loop.d[None], loop.c @ states[:-1]))
        self._inverse, self._closed = Lifted(to_input), Lifted(to_output)
        self._tail, self._tail_gain = _tail(states, cost)

    def solve(self, error: Array, pull: Array | None = None) -> Array:
        """(n_samples, n_inputs): the step for `error` (n_samples, n_outputs) and q = `pull`."""
        factored = self._closed.adjoint(error * self._root_error)
        if pull is not None:
            factored -= self._inverse.adjoint(pull)
        kept = self._tail.shape[0]
        last = factored[-kept:]
        last += np.tensordot(
            self._tail, self._tail_gain @ np.tensordot(self._tail, last, ((0, 2), (0, 1))), (1, 0)
        )
        return self._inverse.apply(factored)


def _cost_to_go(a: Array, b: Array, c: Array, d: Array, effort: Array) -> Array:
    from scipy.linalg import solve_discrete_are

    if len(a) == 0:
        return np.zeros((0, 0))
    try:
        cost = solve_discrete_are(a, b, c.T @ c, np.diag(effort) + d.T @ d, s=c.T @ d)
    except (np.linalg.LinAlgError, ValueError) as error:
        raise SettingError(
            f"law.step_weight: the Riccati equation of model and weights has no solution that can "
            f"be computed ({error}); use a larger step_weight or a model of lower order"
        ) from None
    return np.asarray((cost + cost.T) / 2.0)


def _tail(states: Array, cost: Array) -> tuple[Array, Array]:
    """W as (n_kept, n_states, n_inputs) over the last samples, and (I - W'W)^-1.

    W decays backwards from the end of the trial; what is below rounding is left out.
    """
    values, vectors = np.linalg.eigh(cost)
    root = np.sqrt(np.clip(values, 0.0, None))[:, None] * vectors.T
    weighted = root @ states
    size = np.sqrt(np.sum(weighted**2, axis=(1, 2)))
    above = np.flatnonzero(size > 1e-18 * size.max(initial=0.0))
    kept = weighted[: above[-1] + 1 if len(above) else 1][::-1]
    gram = np.tensordot(kept, kept, ((0, 2), (0, 2)))
    return np.ascontiguousarray(kept), np.asarray(np.linalg.inv(np.eye(len(cost)) - gram))


class NormOptimalLaw:
    """Built by NormOptimalSettings. Keeps nothing between trials."""

    def __init__(self, solver: FactorSolver, size: Array) -> None:
        """`size`: (n_inputs,), the diagonal of Wu."""
        self._solver, self._size = solver, size

    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        pull = self._size * trial.feedforward if self._size.any() else None
        return Step(trial.feedforward + gain * self._solver.solve(trial.error, pull))
