"""The configuration as one checked value."""

from collections.abc import Mapping
from functools import reduce
from operator import or_
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, cast

from annotated_types import MaxLen, MinLen
from pydantic import BaseModel, ConfigDict, Field, PrivateAttr, create_model

from drivers.limits import MAX_CHANNELS
from trialrunner.config.tables import LinkTable, OperatorTable, RehearsalTable, RunTable
from trialrunner.core.bounds import STRICT
from trialrunner.core.guards import guard_table
from trialrunner.core.laws import law_table
from trialrunner.core.plant_model import (
    ImpulseResponseSettings,
    StateSpaceSettings,
    TransferFunctionSettings,
)
from trialrunner.core.settings import (
    FilterSettings,
    Horizon,
    InputChannel,
    LadderSettings,
    LearnSettings,
    OutputChannel,
    RunSettings,
    StopSettings,
)
from trialrunner.core.trial import Array
from trialrunner.reference import (
    FileReference,
    ProfileReference,
    RigReference,
    load_feedforward,
    load_reference,
)
from trialrunner.runtime_dir import default_command_url, default_telemetry_url

_MODEL = cast(ConfigDict, {**STRICT, "frozen": True})

Inputs = Annotated[tuple[InputChannel, ...], MinLen(1), MaxLen(MAX_CHANNELS)]
Outputs = Annotated[tuple[OutputChannel, ...], MinLen(1), MaxLen(MAX_CHANNELS)]
Reference = Annotated[ProfileReference | FileReference | RigReference, Field(discriminator="kind")]

Model = Annotated[
    StateSpaceSettings | TransferFunctionSettings | ImpulseResponseSettings,
    Field(discriminator="kind"),
]

if TYPE_CHECKING:
    Law = Any
    Guards = Any
else:
    # Laws and guards are rows of two tables: a new one needs no line here.
    _laws = tuple(law_table().values())
    Law = Annotated[reduce(or_, _laws), Field(discriminator="kind")] if len(_laws) > 1 else _laws[0]
    Guards = create_model(
        "Guards",
        # No attribute docstrings: there is no source text to take them from.
        __config__=ConfigDict(extra="forbid", strict=True, frozen=True),
        __doc__="Guards by name; each has defaults and need not be named.",
        **{name: (cls, Field(default_factory=cls)) for name, (_, cls) in guard_table().items()},
    )


class Config(BaseModel):
    """Configuration of a run."""

    model_config = _MODEL

    run: RunTable
    link: LinkTable
    trial: Horizon
    inputs: Inputs
    """Channels of the feedforward, in the rig's order; a table [[inputs]] for each."""
    outputs: Outputs
    """Measured channels that follow the reference, in the rig's order; a table [[outputs]] for
    each."""
    reference: Reference
    """What the outputs are to follow."""
    law: Law
    """How an error becomes a feedforward."""
    model: Model | None = None
    """The plant model, for laws that need one: from the feedforward to the outputs."""
    filter: FilterSettings = Field(default_factory=FilterSettings)
    learn: LearnSettings = Field(default_factory=LearnSettings)
    guards: Guards = Field(default_factory=Guards if not TYPE_CHECKING else dict)
    ladder: LadderSettings = Field(default_factory=LadderSettings)
    stop: StopSettings = Field(default_factory=StopSettings)
    operator: OperatorTable = Field(default_factory=OperatorTable)
    rehearsal: RehearsalTable | None = None
    """The mock rig to rehearse with; none if left out."""

    _text: str = PrivateAttr(default="")
    _folder: Path = PrivateAttr(default_factory=Path)
    _warnings: tuple[str, ...] = PrivateAttr(default=())
    _reference: Array | None = PrivateAttr(default=None)

    @property
    def text(self) -> str:
        """TOML text of this configuration as run: as read, or rewritten with the overrides."""
        return self._text

    @property
    def folder(self) -> Path:
        """Directory that the paths of reference files are relative to."""
        return self._folder

    @property
    def warnings(self) -> tuple[str, ...]:
        """What is allowed and probably not meant, in sentences."""
        return self._warnings

    @property
    def record_path(self) -> Path:
        """The record, relative to the current directory unless absolute."""
        return Path(self.run.record or f"{self.run.name}.trialrecord")

    @property
    def command_url(self) -> str:
        return self.operator.command_url or default_command_url(self.run.name)

    @property
    def telemetry_url(self) -> str:
        return self.operator.telemetry_url or default_telemetry_url(self.run.name)

    def guard_settings(self) -> Mapping[str, Any]:
        """Settings of every guard by name, in the order in which they judge."""
        return {name: getattr(self.guards, name) for name in guard_table()}

    def run_settings(self) -> RunSettings:
        """What the pure part needs to know."""
        return RunSettings(
            horizon=self.trial,
            inputs=self.inputs,
            outputs=self.outputs,
            law=self.law,
            model=self.model,
            filter=self.filter,
            learn=self.learn,
            guards=self.guard_settings(),
            ladder=self.ladder,
            stop=self.stop,
        )

    def load_reference(self) -> Array:
        """The reference, (n_samples, n_outputs), before rounding to the wire's sample type.

        Computed or read once. Raises ChannelFileError or SettingError.
        """
        if self._reference is None:
            self._reference = load_reference(self.reference, self.outputs, self.trial, self._folder)
        return self._reference

    def load_feedforward(self) -> Array | None:
        """The configured first feedforward, (n_samples, n_inputs); None for zero.

        Raises ChannelFileError.
        """
        if self.run.initial_feedforward is None:
            return None
        path = self._folder / self.run.initial_feedforward
        return load_feedforward(path, self.inputs, self.trial.n_samples)
