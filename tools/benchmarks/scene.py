"""The signal that speed and memory are measured on: one channel, three modes under random force, and impacts."""

from __future__ import annotations

import numpy as np
from driftwatch.stream.resonator import free_decay, resonator_response
from numpy.typing import NDArray

RATE_HZ = 48_000
MODES = (("low", 180.0, 25.0, 30.0), ("middle", 900.0, 40.0, 80.0), ("high", 2400.0, 150.0, 60.0))
"""Name, natural frequency in Hz, Q, and half the search band in Hz."""

IMPACT_EVERY_S = 60.0


def _mode_text(name: str, frequency_hz: float, half_hz: float) -> str:
    return f"""
[[mode]]
name = "{name}"
channel = "bench"
search_hz = [{frequency_hz - half_hz}, {frequency_hz + half_hz}]
methods = ["ambient", "ringdown"]
window_s = 4.0
step_s = 1.0
[[mode.band]]
name = "warning"
low = {frequency_hz * 0.98}
high = {frequency_hz * 1.02}
"""


SCENE_CONFIG = 'schema = 1\n[[channel]]\nname = "bench"\nquantity = "velocity"\n' + "".join(
    _mode_text(name, frequency_hz, half_hz) for name, frequency_hz, _, half_hz in MODES
)
"""The configuration that follows the three modes by both methods."""


def scene(seconds: float, *, impacts: bool) -> NDArray[np.float32]:
    """Return the samples: each mode's response 20 dB over the noise in its band, impacts 40 dB over that noise."""
    count = round(seconds * RATE_HZ)
    rng = np.random.default_rng(0)
    samples = 1e-3 * rng.standard_normal(count)
    for _, frequency_hz, q, half_hz in MODES:
        in_band = 1e-3 * np.sqrt(2 * half_hz / (RATE_HZ / 2))
        samples += resonator_response(rng, count, RATE_HZ, frequency_hz, q, 10 * in_band, "velocity")
        for onset_s in np.arange(IMPACT_EVERY_S / 2, seconds - 1.0, IMPACT_EVERY_S) if impacts else ():
            first = int(onset_s * RATE_HZ) - 10
            rest = min(count - first, RATE_HZ)
            decay = free_decay(rest, RATE_HZ, frequency_hz, q, 100 * in_band, rng.uniform(0, 2 * np.pi), 10.3)
            samples[first : first + rest] += decay
    return samples.astype(np.float32)
