"""What the daemon hands to a record beside trials and outcomes."""

import json
import platform
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
import scipy

from drivers.messages import Channel
from trialrunner.agreement import LimitsInForce
from trialrunner.conversation.events import Greeted
from trialrunner.core.run_state import from_plain, to_plain


@dataclass(frozen=True)
class RunFacts:
    """What holds for the whole run."""

    config_text: str
    rig: dict[str, Any]
    """The greeting and the channels as the rig declared them."""
    limits: dict[str, list[float]]
    """Limits in force: low, high, rate_per_s, one number for each input."""
    sample_type: str
    version: str
    """Of trialrunner, at the start of the run."""
    started_utc: str

    @classmethod
    def of(
        cls,
        config_text: str,
        greeted: Greeted,
        limits: LimitsInForce,
        version: str,
        started_utc: str,
    ) -> "RunFacts":
        rig = {
            "greeting": asdict(greeted.greeting),
            "inputs": [asdict(channel) for channel in greeted.inputs],
            "outputs": [asdict(channel) for channel in greeted.outputs],
            "auxiliary": [asdict(channel) for channel in greeted.auxiliary],
        }
        return cls(
            config_text=config_text,
            rig=rig,
            limits=_limit_lists(limits),
            sample_type=greeted.greeting.sample_type,
            version=version,
            started_utc=started_utc,
        )

    def same_limits(self, limits: LimitsInForce) -> bool:
        return self.limits == _limit_lists(limits)

    def limits_in_force(self) -> LimitsInForce:
        return LimitsInForce(**{name: np.array(values) for name, values in self.limits.items()})

    def channels(self) -> tuple[Channel, ...]:
        """The rig's channels of all roles as it declared them."""
        roles = ("inputs", "outputs", "auxiliary")
        return tuple(Channel(**values) for role in roles for values in self.rig.get(role, ()))

    def auxiliary_names(self) -> tuple[str, ...]:
        """Names of the rig's auxiliary channels, in its order."""
        return tuple(channel["name"] for channel in self.rig.get("auxiliary", ()))

    def units(self, role: str) -> tuple[str, ...]:
        """UCUM codes of the rig's `inputs`, `outputs` or `auxiliary` channels, in its order."""
        return tuple(channel["unit"] for channel in self.rig.get(role, ()))

    def to_rows(self) -> dict[str, str]:
        """Key and JSON text of each fact; infinities as text, because JSON has none."""
        return {
            key: json.dumps(to_plain(value), allow_nan=False) for key, value in vars(self).items()
        }

    @classmethod
    def from_rows(cls, rows: dict[str, str]) -> "RunFacts":
        return cls(**{key: from_plain(json.loads(text)) for key, text in rows.items()})


def _limit_lists(limits: LimitsInForce) -> dict[str, list[float]]:
    return {name: getattr(limits, name).tolist() for name in ("low", "high", "rate_per_s")}


@dataclass(frozen=True)
class DaemonRow:
    """A daemon takes the record up, with the configuration that holds from there on, or lays it
    down. One that died has no second row."""

    event: str
    """start or stop."""
    utc: str
    version: str
    """Of trialrunner."""
    platform: str
    """JSON: versions of what computes; other ones may round otherwise."""
    config_text: str = ""

    @classmethod
    def start(cls, config_text: str, version: str, utc: str) -> "DaemonRow":
        return cls("start", utc, version, platform_json(), config_text)


def platform_json() -> str:
    """Machine and versions on which bit-identical arithmetic depends."""
    found = {
        "machine": platform.machine(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
    }
    return json.dumps(found)


@dataclass(frozen=True)
class TrialTiming:
    """When a trial was and how long what follows it took."""

    started_utc: str
    monotonic_ns: int
    collect_s: float = 0.0
    """From the rig's end report to the last sample."""
    compute_s: float = 0.0
    """Guards, law, filter and limits."""

    def with_compute(self, seconds: float) -> "TrialTiming":
        return replace(self, compute_s=seconds)


@dataclass(frozen=True)
class RequestRow:
    """An operator's request: who asked for what, why, and what came of it."""

    id: str
    kind: str
    target: str
    who: str
    why: str
    asked_utc: str
    effect_trial: int
    """Index of the run state that it changed."""
    changes_state: bool
    ok: bool
    answer: str
    """The answer given, as JSON."""


@dataclass(frozen=True)
class Transition:
    """One step of the cycle."""

    utc: str
    trial: int
    before: str
    event: str
    after: str
    cause: str
