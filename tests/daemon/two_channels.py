"""What tests of the processes that measure share: two channels of one mode each, at 1 kHz."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from driftwatch.config import Configuration, loads
from driftwatch.daemon.messages import LiveSource
from driftwatch.records import NS, Measurement, Method, TimeQuality

RATE = 1000
START_NS = 1_767_225_600 * NS
RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
SOURCE = LiveSource("model", RATE, 2, START_NS, TimeQuality.FREE, ("model",), ())

CONFIG = """
schema = 1
[station]
name = "s"
[[channel]]
name = "a"
[[channel]]
name = "b"
input = 2
[[mode]]
name = "m"
channel = "a"
search_hz = [80.0, 160.0]
window_s = 1.0
step_s = 0.25
[[mode.band]]
name = "low"
low = 130.0
on_delay_s = 1.0
[[mode]]
name = "m"
channel = "b"
search_hz = [80.0, 160.0]
methods = ["ambient", "ringdown"]
window_s = 1.0
step_s = 0.5
[daemon]
workers = {workers}
queue_s = {queue_s}
"""


def configuration(workers: int = 1, queue_s: float = 20.0) -> Configuration:
    return loads(CONFIG.format(workers=workers, queue_s=queue_s))


def ambient(bodies: Iterable[Any]) -> dict[tuple[str, int], Measurement]:
    """Return the measurements of ambient windows by channel and first sample."""
    measured = [body for body in bodies if isinstance(body, Measurement) and body.method is Method.AMBIENT]
    return {(body.channel, body.first_sample): body for body in measured}
