"""Plant models that laws use: state space, transfer functions or an impulse response.

Each is a table `[model]` of the configuration, so that the record holds it with everything else
and a replay needs no other file. The model is of what the law sees: from the feedforward to the
measured outputs, the rig's own feedback loop included.
"""

from dataclasses import dataclass
from typing import Any, ClassVar, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from trialrunner.core.bounds import STRICT, Positive
from trialrunner.core.errors import SettingError
from trialrunner.core.trial import Array

Complex = NDArray[np.complex128]
Row = tuple[float, ...]
Matrix = tuple[Row, ...]


@dataclass(frozen=True)
class StateSpace:
    """x(k+1) = a x + b u, y = c x + d u; shapes (n, n), (n, m), (p, n), (p, m)."""

    a: Array
    b: Array
    c: Array
    d: Array

    def impulse_response(self, n_lags: int) -> Array:
        """(n_lags, p, m): d, c b, c a b, ..."""
        states = reachability(self.a, self.b, max(n_lags - 1, 0))
        return np.concatenate((self.d[None], self.c @ states))[:n_lags]

    def response(self, z_inverse: Complex) -> Complex:
        """(n_frequencies, p, m) at the given values of 1/z, which are not zero."""
        n = len(self.a)
        z = 1.0 / z_inverse
        resolvent = np.linalg.solve(
            z[:, None, None] * np.eye(n) - self.a, np.broadcast_to(self.b, (len(z), *self.b.shape))
        )
        return np.asarray(self.c @ resolvent + self.d, dtype=np.complex128)

    @property
    def spectral_radius(self) -> float:
        return float(np.max(np.abs(np.linalg.eigvals(self.a)), initial=0.0))


def reachability(a: Array, b: Array, n_lags: int) -> Array:
    """(n_lags, n, m): b, a b, a^2 b, ...; by doubling, so log2(n_lags) products."""
    states = np.empty((n_lags, *b.shape))
    states[:1] = b
    done, power = 1, a
    while done < n_lags:
        more = min(done, n_lags - done)
        states[done : done + more] = power @ states[:more]
        done += more
        power = power @ power
    return states


@dataclass(frozen=True)
class PlantModel:
    """A checked, causal, stable model; give `state_space` or `lags`."""

    n_inputs: int
    n_outputs: int
    state_space: StateSpace | None
    lags: Array | None = None
    """(n_lags, n_outputs, n_inputs): the impulse response, zero afterwards."""

    def impulse_response(self, n_samples: int) -> Array:
        """(n_samples, n_outputs, n_inputs): the Markov parameters from lag 0."""
        if self.state_space is not None:
            return self.state_space.impulse_response(n_samples)
        assert self.lags is not None
        found = np.zeros((n_samples, *self.lags.shape[1:]))
        kept = self.lags[:n_samples]
        found[: len(kept)] = kept
        return found

    def response(self, n_fft: int) -> Complex:
        """(n_fft // 2 + 1, n_outputs, n_inputs) at the frequencies of an rfft of `n_fft`."""
        if self.state_space is not None:
            angle = 2.0 * np.pi * np.arange(n_fft // 2 + 1) / n_fft
            return self.state_space.response(np.exp(-1j * angle))
        assert self.lags is not None
        # Lags beyond n_fft fold back, as a response sampled at n_fft frequencies demands.
        folds = -(-len(self.lags) // n_fft)
        padded = np.zeros((folds * n_fft, *self.lags.shape[1:]))
        padded[: len(self.lags)] = self.lags
        folded = padded.reshape(folds, n_fft, *self.lags.shape[1:]).sum(axis=0)
        return np.asarray(np.fft.rfft(folded, axis=0))


class ModelSettings(Protocol):
    @property
    def kind(self) -> str: ...

    @property
    def period_s(self) -> float: ...

    def build(self) -> PlantModel: ...


@dataclass(frozen=True, kw_only=True)
class StateSpaceSettings:
    """x(k+1) = a x(k) + b u(k), y(k) = c x(k) + d u(k)."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["state_space"] = "state_space"
    period_s: Positive
    """Sample period of the model; must be the trial's."""
    a: Matrix
    """States by states."""
    b: Matrix
    """States by inputs."""
    c: Matrix
    """Outputs by states."""
    d: Matrix = ()
    """Outputs by inputs; zero if left out."""

    def build(self) -> PlantModel:
        a, b, c = (_matrix(f"model.{key}", getattr(self, key)) for key in "abc")
        d = _matrix("model.d", self.d) if self.d else np.zeros((len(c), b.shape[1]))
        n, m, p = len(a), b.shape[1], len(c)
        expected = {"a": (n, n), "b": (n, m), "c": (p, n), "d": (p, m)}
        for (key, shape), found in zip(expected.items(), (a, b, c, d), strict=True):
            if found.shape != shape:
                raise SettingError(
                    f"model.{key}: expected {shape[0]} rows of {shape[1]} numbers to fit the other "
                    f"matrices, found {found.shape[0]} rows of {found.shape[1]}"
                )
        return _stable(PlantModel(m, p, StateSpace(a, b, c, d)))


@dataclass(frozen=True, kw_only=True)
class TransferFunctionSettings:
    """A transfer function in powers of z^-1 for each pair of output and input."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["transfer_function"] = "transfer_function"
    period_s: Positive
    """Sample period of the model; must be the trial's."""
    numerator: tuple[Matrix, ...]
    """numerator[output][input] lists the coefficients of z^0, z^-1, z^-2, ...; leading zeros are
    the delay."""
    denominator: tuple[Matrix, ...]
    """Likewise; the coefficient of z^0 is not zero."""

    def build(self) -> PlantModel:
        p, m = len(self.numerator), len(self.numerator[0]) if self.numerator else 0
        for key, table in (("numerator", self.numerator), ("denominator", self.denominator)):
            if not p or not m or len(table) != p or any(len(row) != m for row in table):
                raise SettingError(
                    f"model.{key}: expected one list of coefficients for each output and input, "
                    f"{p} by {m} as in the numerator, found another table"
                )
        rows = [[self._pair(o, i) for i in range(m)] for o in range(p)]
        return _stable(PlantModel(m, p, _assembled(rows)))

    def _pair(self, output: int, input: int) -> StateSpace:
        numerator, denominator = self.numerator[output][input], self.denominator[output][input]
        where = f"model.denominator of output {output} and input {input}"
        if not denominator or denominator[0] == 0.0:
            raise SettingError(
                f"{where}: expected a first coefficient (z^0) that is not zero, found "
                f"{list(denominator)}; with zero there the model would answer before its input"
            )
        if not numerator or not np.all(np.isfinite((*numerator, *denominator))):
            raise SettingError(f"{where} or its numerator: expected finite coefficients")
        return _companion(np.array(numerator), np.array(denominator))


@dataclass(frozen=True, kw_only=True)
class ImpulseResponseSettings:
    """The answer of each output to a unit pulse of one sample at each input."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["impulse_response"] = "impulse_response"
    period_s: Positive
    """Sample period of the model; must be the trial's."""
    lags: tuple[Matrix, ...]
    """lags[lag][output][input] from lag 0 (the sample of the pulse itself); zero afterwards."""

    def build(self) -> PlantModel:
        rows = [_matrix(f"model.lags[{lag}]", row) for lag, row in enumerate(self.lags)]
        if not rows or any(row.shape != rows[0].shape for row in rows):
            raise SettingError(
                "model.lags: expected at least one lag and the same outputs and inputs in each"
            )
        lags = np.stack(rows)
        return PlantModel(lags.shape[2], lags.shape[1], None, lags)


def _matrix(name: str, rows: Matrix) -> Array:
    if not rows or not rows[0] or any(len(row) != len(rows[0]) for row in rows):
        raise SettingError(f"{name}: expected rows of the same length, at least one number each")
    found = np.array(rows, dtype=np.float64)
    if not np.all(np.isfinite(found)):
        raise SettingError(f"{name}: expected finite numbers, found infinity or NaN")
    return found


def _stable(model: PlantModel) -> PlantModel:
    assert model.state_space is not None
    radius = model.state_space.spectral_radius
    if radius >= 1.0:
        raise SettingError(
            f"model: expected a stable model (all poles inside the unit circle), found a pole of "
            f"magnitude {radius:.6g}; close the rig's feedback loop and model what the feedforward "
            "sees then"
        )
    return model


def _companion(numerator: Array, denominator: Array) -> StateSpace:
    """Controllable form of one transfer function in z^-1 (Kailath, Linear Systems)."""
    n = max(len(numerator), len(denominator)) - 1
    num, den = np.zeros(n + 1), np.zeros(n + 1)
    num[: len(numerator)] = numerator / denominator[0]
    den[: len(denominator)] = denominator / denominator[0]
    a = np.eye(n, k=-1)
    b = np.zeros((n, 1))
    if n:
        a[0], b[0] = -den[1:], 1.0
    return StateSpace(a, b, (num[1:] - den[1:] * num[0])[None], np.array([[num[0]]]))


def _assembled(rows: list[list[StateSpace]]) -> StateSpace:
    """All pairs side by side; states are not shared, so the order is the sum of the orders."""
    p, m = len(rows), len(rows[0])
    n = sum(len(one.a) for row in rows for one in row)
    a, b, c, d = np.zeros((n, n)), np.zeros((n, m)), np.zeros((p, n)), np.zeros((p, m))
    at = 0
    for o, row in enumerate(rows):
        for i, one in enumerate(row):
            to = at + len(one.a)
            a[at:to, at:to], b[at:to, i], c[o, at:to] = one.a, one.b[:, 0], one.c[0]
            d[o, i] = one.d[0, 0]
            at = to
    return StateSpace(a, b, c, d)


def build_plant(settings: ModelSettings | None, period_s: float) -> PlantModel | None:
    """The model of a run with that sample period; None without settings. Raises SettingError."""
    if settings is None:
        return None
    if abs(settings.period_s - period_s) > 1e-9 * period_s:
        raise SettingError(
            f"model.period_s: expected the trial's {period_s:g} s, found {settings.period_s:g} s; "
            "a model holds for one sample period, identify or convert it for this one"
        )
    return settings.build()
