"""The friction against the LuGre paper and against a stiff solver of somebody else's.

Source of model and parameters: Canudas de Wit, Olsson, Astrom and Lischinsky, "A new model for
control of systems with friction", IEEE Trans. Automatic Control 40(3), 1995: Table I and the
experiments of its section on simulations (1 kg on a spring of 2 N/m drawn at 0.1 m/s; a force
ramped to 1.425 N and back). The steady values are worked out by hand from its formula.
"""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from mock_rig.friction import LuGre

PAPER = LuGre(s0=1e5, s1=math.sqrt(1e5), s2=0.4, coulomb=1.0, stiction=1.5, stribeck=0.001)
MASS_KG = 1.0
STEP_S = 0.25e-3


def slide(velocity: float, duration_s: float) -> float:
    """Force at the end of a time at constant velocity."""
    z = force = 0.0
    for _ in range(round(duration_s / STEP_S)):
        z, force = PAPER.step(z, velocity, STEP_S)
    return force


def push(force_n: np.ndarray, step_s: float = STEP_S) -> tuple[np.ndarray, np.ndarray]:
    """Positions and velocities of the mass under a force in each step."""
    z = velocity = position = 0.0
    states = np.empty((len(force_n), 2))
    for index, force in enumerate(force_n.tolist()):
        z, friction = PAPER.step(z, velocity, step_s)
        velocity += step_s * (force - friction) / MASS_KG
        position += step_s * velocity
        states[index] = position, velocity
    return states[:, 0], states[:, 1]


def bristle_rate(z: float, v: float) -> float:
    """dz/dt, written here once more from the paper, for the solver."""
    level = 1.0 + 0.5 * math.exp(-((v / 0.001) ** 2))
    return v - 1e5 * abs(v) * z / level


@pytest.mark.parametrize(("velocity", "force"), [(0.001, 1.18434), (0.01, 1.00400), (0.1, 1.04)])
def test_steady_friction_is_the_papers(velocity: float, force: float) -> None:
    """F = Fc + (Fs - Fc) exp(-(v/vs)^2) + s2 v, worked by hand; odd in velocity."""
    assert PAPER.steady(velocity) == pytest.approx(force, abs=5e-6)
    assert PAPER.steady(-velocity) == pytest.approx(-force, abs=5e-6)


@pytest.mark.parametrize("velocity", [0.0005, 0.001, 0.01, 0.1, -0.01])
def test_sliding_on_reaches_the_steady_friction(velocity: float) -> None:
    assert slide(velocity, 0.5) == pytest.approx(PAPER.steady(velocity), rel=1e-6)


def test_friction_falls_and_then_rises_with_velocity() -> None:
    """The Stribeck effect: from Fs at rest down towards Fc, then up with viscous friction."""
    velocities = np.geomspace(1e-5, 1.0, 200)
    forces = np.array([PAPER.steady(v) for v in velocities])
    twice = PAPER.scaled(2.0)
    assert [twice.level(v) for v in velocities] == [2.0 * PAPER.level(v) for v in velocities]
    lowest = int(np.argmin(forces))
    assert forces[0] == pytest.approx(1.5, rel=1e-3)
    assert 1.0 < forces[lowest] < 1.01
    assert np.all(np.diff(forces[: lowest + 1]) < 0.0)
    assert np.all(np.diff(forces[lowest:]) > 0.0)


def test_below_break_away_the_mass_sticks_and_above_it_slides() -> None:
    """Presliding, as in the paper's ramp: micrometres at 1.425 N, away beyond 1.5 N."""
    ramp = np.concatenate([np.linspace(0.0, 1.425, 12_000), np.full(4_000, 1.425)])
    position, velocity = push(ramp)
    # A spring of s0 would give F / s0 = 14 um; near break-away the bristles give way and creep.
    assert 1.425e-5 < position[len(ramp) - 4_000] < 1e-4
    assert np.max(np.abs(velocity)) < 1e-3
    position, velocity = push(np.concatenate([ramp, np.full(4_000, 1.6)]))
    assert velocity[-1] > 0.05


def test_a_small_force_meets_a_spring_of_the_bristles_stiffness() -> None:
    """For small displacements F = s0 x (the paper's linearisation about rest)."""
    position, _ = push(np.full(8_000, 0.05))
    assert position[-1] == pytest.approx(0.05 / 1e5, rel=0.05)


def test_presliding_leaves_a_hysteresis() -> None:
    """Force up to 1.425 N, down to -1.425 N, and to zero: the mass does not come back to zero."""
    legs = [(0.0, 1.425), (1.425, -1.425), (-1.425, 1.425), (1.425, 0.0)]
    force = np.concatenate([np.linspace(a, b, 8_000) for a, b in legs])
    position, _ = push(force)
    crossings = np.flatnonzero(np.diff(np.sign(force)) != 0)
    down, up = position[crossings[-2]], position[crossings[-1]]
    assert abs(down - up) > 1e-6
    assert np.max(np.abs(position)) < 2e-4


def test_the_force_follows_a_stiff_solver_through_reversals() -> None:
    """Oracle: scipy's Radau on the paper's equation, velocity a sine through zero."""
    amplitude, frequency_hz, n = 0.002, 2.0, 4_000

    def velocity(t: float) -> float:
        return amplitude * math.sin(2 * math.pi * frequency_hz * t)

    middles = STEP_S * (np.arange(n) + 0.5)
    bristles = solve_ivp(
        lambda t, z: [bristle_rate(z[0], velocity(t))],
        (0.0, n * STEP_S),
        [0.0],
        method="Radau",
        t_eval=middles,
        rtol=1e-8,
        atol=1e-12,
        max_step=1e-3,
    ).y[0]
    exact, ours, after = np.empty(n), np.empty(n), 0.0
    for k, (t, z) in enumerate(zip(middles.tolist(), bristles.tolist(), strict=True)):
        v = velocity(t)
        exact[k] = 1e5 * z + math.sqrt(1e5) * bristle_rate(z, v) + 0.4 * v
        after, ours[k] = PAPER.step(after, v, STEP_S)
    assert np.max(np.abs(ours - exact)) < 1e-3 * np.max(np.abs(exact))


def test_a_mass_drawn_by_a_spring_sticks_and_slips() -> None:
    """The paper's stick-slip: 1 kg, 2 N/m, 0.1 m/s; slips as a stiff solver has it."""
    spring, draw, duration_s = 2.0, 0.1, 12.0

    def right_side(t: float, state: np.ndarray) -> list[float]:
        x, v, z = state
        rate = bristle_rate(z, v)
        friction = 1e5 * z + math.sqrt(1e5) * rate + 0.4 * v
        return [v, spring * (draw * t - x) - friction, rate]

    times = np.linspace(0.0, duration_s, 1201)[1:]
    exact = solve_ivp(
        right_side, (0.0, duration_s), [0.0] * 3, "LSODA", times, rtol=1e-7, atol=1e-10
    ).y
    z = v = x = 0.0
    n = round(duration_s / STEP_S)
    states = np.empty((n, 2))
    for k in range(n):
        z, friction = PAPER.step(z, v, STEP_S)
        v += STEP_S * (spring * (draw * k * STEP_S - x) - friction) / MASS_KG
        x += STEP_S * v
        states[k] = x, v
    ours = states[np.round(times / STEP_S).astype(int) - 1]
    assert np.max(np.abs(ours[:, 0] - exact[0])) < 0.02 * np.max(exact[0])
    stuck = np.abs(states[:, 1]) < 1e-3
    # The spring reaches 1.5 N after 7.5 s; until then the mass creeps by micrometres.
    assert np.all(stuck[: round(7.0 / STEP_S)])
    assert np.max(states[:, 1]) > draw
    assert stuck[-1]
