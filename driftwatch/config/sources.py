"""Where samples come from: one model for each kind of source."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationError, ValidationInfo, field_validator
from pydantic_core import InitErrorDetails

from driftwatch.config.values import (
    Count,
    Delay,
    Flag,
    FrequencyProfile,
    LevelProfile,
    Name,
    NotNegative,
    Positive,
    QProfile,
    Quantity,
    RateHz,
    Seconds,
    Table,
    Text,
    refusal,
)


class ResonatorConfig(Table):
    """One simulated resonance, seen by one input; digital full scale is 1."""

    input: Count = 1  # from 1
    frequency_hz: FrequencyProfile  # undamped natural frequency
    q: QProfile  # 1/(2 zeta)
    level: LevelProfile = ((0.0, 0.0),)  # rms of its response to random force; 0: no random force
    quantity: Quantity = "acceleration"  # what the input senses of it
    impact_every_s: Seconds | None = None  # None: no impacts, or the one at impact_first_s
    impact_first_s: Delay | None = Field(default_factory=lambda data: data.get("impact_every_s"))
    impact_peak: NotNegative = 0.0  # amplitude at which the decay begins

    @field_validator("impact_peak")
    @classmethod
    def _peak_has_times(cls, peak: float, info: ValidationInfo) -> float:
        if peak > 0 and info.data.get("impact_first_s", 0.0) is None:
            raise refusal("impact_every_s or impact_first_s beside it", "say when the impacts come")
        return peak


class ToneConfig(Table):
    """One simulated sine that is no resonance."""

    input: Count = 1  # from 1
    frequency_hz: FrequencyProfile
    level: LevelProfile  # rms, digital full scale is 1


class SoundcardSourceConfig(Table):
    """Samples from a sound input."""

    name: Name
    kind: Literal["soundcard"] = "soundcard"
    device: Text | None = None  # part of a name; None: the default input
    rate_hz: RateHz = 48_000
    inputs: Count | None = None  # how many are opened; None: as many as the channels need, and two if there are
    sample_format: Literal["float32", "int16", "int32"] = "float32"  # as asked of the device
    block_s: Annotated[Positive, Field(ge=0.002, le=0.5)] = 0.01  # samples that the device hands over at a time
    wait_for_device: Flag = False  # where it is not there at the start: wait instead of refusing

    def opened_inputs(self, needed: int) -> int:
        """Return how many inputs are opened, if the device has them, where channels use the first `needed` ones.

        Where the file does not say it, two at least: of one input alone many sound servers make a mixture of all.
        """
        return self.inputs or max(2, needed)


class RecordingSourceConfig(Table):
    """Samples from a recording, at a pace."""

    name: Name
    kind: Literal["recording"] = "recording"
    path: Text  # relative to the configuration's file; absolute once loaded
    pace: NotNegative = 1.0  # times real time; 0: as fast as it can

    @field_validator("path")
    @classmethod
    def _beside_the_file(cls, path: str, info: ValidationInfo) -> str:
        return str((base_of(info) / path).resolve()) if info.context else path


class SimulatedSourceConfig(Table):
    """Samples computed from resonators, tones and noise with known truth."""

    name: Name
    kind: Literal["simulated"] = "simulated"
    rate_hz: RateHz
    inputs: Count = 1
    seed: Annotated[int, Field(strict=True, ge=0, lt=2**63)] = 0
    pace: NotNegative = 1.0  # times real time; 0: as fast as it can
    seconds: Positive | None = None  # length; None: endless
    noise: NotNegative = 0.0  # rms of white noise on every input, digital full scale is 1
    resonator: tuple[ResonatorConfig, ...] = ()
    tone: tuple[ToneConfig, ...] = ()

    @field_validator("resonator", "tone")
    @classmethod
    def _inside_the_source(
        cls, parts: tuple[ResonatorConfig | ToneConfig, ...], info: ValidationInfo
    ) -> tuple[ResonatorConfig | ToneConfig, ...]:
        rate_hz, inputs = info.data.get("rate_hz"), info.data.get("inputs")
        errors = [error for index, part in enumerate(parts) for error in _misfits(index, part, rate_hz, inputs)]
        if errors:
            raise ValidationError.from_exception_data("source", errors)
        return parts


def _misfits(
    index: int, part: ResonatorConfig | ToneConfig, rate_hz: int | None, inputs: int | None
) -> Iterator[InitErrorDetails]:
    """Yield what does not fit into a source of `rate_hz` with so many `inputs`."""
    if inputs is not None and part.input > inputs:
        error = refusal(f"an input from 1 to {inputs}", "raise the source's inputs or choose another input")
        yield InitErrorDetails(type=error, loc=(index, "input"), input=part.input)
    top = max(value for _, value in part.frequency_hz)
    if rate_hz is not None and top >= rate_hz / 2:
        error = refusal(f"frequencies under half the rate, {rate_hz / 2:g} Hz", "raise rate_hz or lower the frequency")
        yield InitErrorDetails(type=error, loc=(index, "frequency_hz"), input=top)


class FeedSourceConfig(Table):
    """Samples that another program sends."""

    name: Name
    kind: Literal["feed"] = "feed"
    endpoint: Text | None = None
    rate_hz: RateHz | None = None
    inputs: Count = 1


SourceConfig = Annotated[
    SoundcardSourceConfig | RecordingSourceConfig | SimulatedSourceConfig | FeedSourceConfig,
    Field(discriminator="kind"),
]


def base_of(info: ValidationInfo) -> Path:
    """Return the directory that relative paths start from: the configuration's own, or the current one."""
    context: Any = info.context or {}
    return Path(context.get("base", "."))
