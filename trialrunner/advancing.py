"""From settings, limits and reference to the advancer: the same way for daemon and replay."""

from dataclasses import replace

from trialrunner.agreement import LimitsInForce
from trialrunner.core.advance import Advancer
from trialrunner.core.laws import LawContext
from trialrunner.core.plant_model import build_plant
from trialrunner.core.settings import RunSettings
from trialrunner.core.trial import Array


def settings_in_force(settings: RunSettings, limits: LimitsInForce) -> RunSettings:
    """The settings with the tighter of the configuration's and the rig's limits."""
    inputs = tuple(
        replace(channel, low=float(low), high=float(high), rate_limit_per_s=float(rate))
        for channel, low, high, rate in zip(
            settings.inputs, limits.low, limits.high, limits.rate_per_s, strict=True
        )
    )
    return replace(settings, inputs=inputs)


def make_advancer(
    settings: RunSettings,
    limits: LimitsInForce,
    reference: Array,
    sample_type: str,
    auxiliary: tuple[str, ...] = (),
) -> Advancer:
    """`reference` is (n_samples, n_outputs), in numbers of the rig's `sample_type`, "f4" or "f8".
    `auxiliary` names the rig's auxiliary channels in its order. Raises SettingError.
    """
    settings = replace(settings_in_force(settings, limits), auxiliary=auxiliary)
    plant = build_plant(settings.model, settings.horizon.period_s)
    context = LawContext.of(settings, reference, plant)
    return Advancer(settings, context, sample_type)
