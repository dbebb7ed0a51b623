"""Samples of resonators, tones and noise with known truth."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driftwatch.config import Profile, ResonatorConfig, SimulatedSourceConfig
from driftwatch.records import Block, TimeQuality, sample_time_ns
from driftwatch.stream.course import Course
from driftwatch.stream.resonator import SEGMENT, Motion, Resonator

STRETCH = 64 * SEGMENT
"""Samples computed at a time, on a grid from sample 0: so the samples do not depend on how they are asked for."""

_RESONATOR, _NOISE = 0, 1  # first word of a part's random stream: adding one part leaves the others as they were


@dataclass(frozen=True, slots=True)
class SimulatedSource:
    """The simulated source of a configuration.

    The samples follow from the configuration alone: the same whenever they are asked for and in blocks of any size.
    """

    config: SimulatedSourceConfig
    start_ns: int  # stream time of sample 0
    time_quality: TimeQuality = TimeQuality.ASSUMED

    @property
    def name(self) -> str:
        """What the configuration calls it."""
        return self.config.name

    @property
    def rate_hz(self) -> int:
        """Sample rate, Hz."""
        return self.config.rate_hz

    @property
    def inputs(self) -> int:
        """How many columns a block has."""
        return self.config.inputs

    @property
    def first_sample(self) -> int:
        """The stream begins with it."""
        return 0

    @property
    def sources(self) -> tuple[str, ...]:
        """What is read, for the run's record."""
        return (f"simulated, seed {self.config.seed}",)

    @property
    def assumed(self) -> tuple[str, ...]:
        """Nothing: all of it is known."""
        return ()

    @property
    def warnings(self) -> tuple[str, ...]:
        """None."""
        return ()

    @property
    def length(self) -> int | None:
        """Samples in all; None: endless."""
        return None if self.config.seconds is None else max(1, round(self.config.seconds * self.config.rate_hz))

    def blocks(self, frames: int) -> Iterator[Block]:
        """Yield the samples from the begin on in blocks of `frames`, the last one shorter."""
        stretches = _stretches(self.config)
        rest = np.empty((0, self.inputs), np.float32)
        first = 0
        while self.length is None or first < self.length:
            wanted = frames if self.length is None else min(frames, self.length - first)
            samples = np.empty((wanted, self.inputs), np.float32)
            filled = 0
            while filled < wanted:
                if not len(rest):
                    rest = next(stretches)
                part = rest[: wanted - filled]
                samples[filled : filled + len(part)] = part
                filled, rest = filled + len(part), rest[len(part) :]
            yield Block(self.name, first, sample_time_ns(self.start_ns, first, self.rate_hz), samples)
            first += wanted


def _stretches(config: SimulatedSourceConfig) -> Iterator[NDArray[np.float32]]:
    """Yield the samples without end, `STRETCH` at a time, shape (STRETCH, inputs)."""
    resonators = [_resonator(config, index, part) for index, part in enumerate(config.resonator)]
    tones = [_Tone(Course.of(part.frequency_hz), Course.of(part.level)) for part in config.tone]
    hiss = [_random(config, _NOISE, index) for index in range(config.inputs)]
    first = 0
    while True:
        out = np.zeros((config.inputs, STRETCH))
        for resonator, part in zip(resonators, config.resonator, strict=True):
            out[part.input - 1] += resonator.take(STRETCH)
        for tone, at in zip(tones, config.tone, strict=True):
            out[at.input - 1] += tone.samples(first, STRETCH, config.rate_hz)
        if config.noise:
            for row, rng in zip(out, hiss, strict=True):
                row += config.noise * rng.standard_normal(STRETCH)
        yield out.T.astype(np.float32)
        first += STRETCH


def _random(config: SimulatedSourceConfig, part: int, index: int) -> np.random.Generator:
    return np.random.default_rng(np.random.SeedSequence(config.seed, spawn_key=(part, index)))


def _resonator(config: SimulatedSourceConfig, index: int, part: ResonatorConfig) -> Resonator:
    return Resonator(_random(config, _RESONATOR, index), config.rate_hz, motion_of(part))


def motion_of(part: ResonatorConfig) -> Motion:
    """Return what a configured resonator does over time."""
    return Motion(
        frequency_hz=Course.of(part.frequency_hz),
        q=Course.of(part.q),
        level=Course.of(part.level),
        quantity=part.quantity,
        impact_first_s=part.impact_first_s,
        impact_every_s=part.impact_every_s,
        impact_peak=part.impact_peak,
    )


@dataclass(frozen=True, slots=True)
class _Tone:
    """A sine whose phase, 0 at the start, runs on while its frequency changes."""

    frequency_hz: Course
    level: Course  # rms

    def samples(self, first: int, count: int, rate_hz: int) -> NDArray[np.float64]:
        seconds = (first + np.arange(float(count))) / rate_hz
        cycles = self.frequency_hz.integral(seconds)
        peak = np.sqrt(2) * self.level.at(seconds)
        return np.asarray(peak * np.sin(2 * np.pi * (cycles - np.floor(cycles))))


# ---------------------------------------------------------------------------------------------- the truth


def truth_of(source: SimulatedSource) -> dict[str, Any]:
    """Return what is known of a source of known length, ready for JSON; seconds count from the first sample."""
    config = source.config
    samples = source.length or 0
    return {
        "rate_hz": config.rate_hz,
        "inputs": config.inputs,
        "samples": samples,
        "seconds": samples / config.rate_hz,
        "seed": config.seed,
        "noise": config.noise,
        "resonators": [_resonator_truth(part, samples, config.rate_hz) for part in config.resonator],
        "tones": [
            {"input": part.input, "frequency_hz": _plain(part.frequency_hz), "level": _plain(part.level)}
            for part in config.tone
        ],
        "words": _WORDS,
    }


_WORDS = {
    "frequency_hz": "undamped natural frequency; [[seconds, value], ...] are corner points with straight lines between",
    "q": "1/(2 zeta)",
    "level": "rms that the random force causes, full scale is 1; of acceleration: wn times the velocity's, so without "
    "the force's own white part",
    "impacts_s": "instants at which a decay of amplitude impact_peak begins",
    "noise": "rms of white noise on every input",
}


def _resonator_truth(part: ResonatorConfig, samples: int, rate_hz: int) -> dict[str, Any]:
    onsets = motion_of(part).impacts(0, samples, rate_hz)
    return {
        "input": part.input,
        "quantity": part.quantity,
        "frequency_hz": _plain(part.frequency_hz),
        "q": _plain(part.q),
        "level": _plain(part.level),
        "impacts_s": [onset / rate_hz for onset in onsets],
        "impact_peak": part.impact_peak if onsets else None,
    }


def _plain(profile: Profile) -> float | Profile:
    """Return a number where nothing changes."""
    return profile[0][1] if len(profile) == 1 else profile
