"""Print what the bus carries."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.figures import duration, in_words
from driftwatch.cli.looking import print_lines, quiet_pipe

if TYPE_CHECKING:
    from collections.abc import Iterator

DEFAULT_ENDPOINT = "tcp://127.0.0.1:5571"
QUIET_S = 5.0
"""Silence after which a listener is told, seconds; a daemon says every second that it lives."""

_QUEUED = 100_000


@click.command("listen")
@click.argument("endpoint", default=DEFAULT_ENDPOINT)
@click.option("--topic", "topics", multiple=True, metavar="PREFIX", help="Only topics that begin so; may be repeated.")
@click.option("--count", type=click.IntRange(min=1), metavar="N", help="Stop after so many messages.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line, as it came.")
def command(endpoint: str, topics: tuple[str, ...], count: int | None, as_json: bool) -> None:
    """Print what a daemon publishes on ENDPOINT, until interrupted.

    What was missed, and silence, is told on stderr.

    \b
    Example: driftwatch listen tcp://127.0.0.1:5571 --topic alert/ --topic track/drive_end/
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    from driftwatch.bus.holes import HoleFinder

    holes = HoleFinder(everything=not topics)
    printed = 0
    try:
        with quiet_pipe():
            for topic, raw in _messages(endpoint, topics):
                message = _object(endpoint, raw)
                if hole := holes.seen(topic, message):
                    click.echo(f"Hole: {hole}", err=True)
                if topics and not topic.startswith(topics):
                    continue  # a heartbeat that was not asked for
                _print(topic, raw, message, as_json)
                printed += 1
                if printed == count:
                    break
    except KeyboardInterrupt:
        click.echo(f"{printed} messages.", err=True)


def _object(endpoint: str, raw: bytes) -> dict[str, Any]:
    try:
        message = json.loads(raw)
    except ValueError:
        message = None
    if not isinstance(message, dict) or not message.keys() >= {"kind", "run", "sequence", "time"}:
        raise click.ClickException(
            f"{endpoint} sent {raw[:60]!r}, which is no record; "
            "expected a daemon of driftwatch there; check the endpoint"
        )
    return message


def _messages(endpoint: str, topics: tuple[str, ...]) -> Iterator[tuple[str, bytes]]:
    """Yield topics and objects; tell on stderr when nothing comes, be it a heartbeat, for `QUIET_S`."""
    import zmq

    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.RCVHWM, _QUEUED)
        for topic in (*topics, "heartbeat") if topics else ("",):
            socket.setsockopt_string(zmq.SUBSCRIBE, topic)
        try:
            socket.connect(endpoint)
        except zmq.ZMQError as error:
            raise click.UsageError(
                f"{endpoint!r} cannot be listened to: {error}; expected tcp://HOST:PORT, such as {DEFAULT_ENDPOINT}"
            ) from None
        silent = False
        while True:
            if socket.poll(round(QUIET_S * 1000)):
                silent = False
                frames = socket.recv_multipart()
                yield frames[0].decode(errors="replace"), frames[-1]
            elif not silent:
                silent = True
                click.echo(
                    f"Nothing came from {endpoint} for {duration(QUIET_S)}, not even a heartbeat; "
                    "is a daemon running that publishes there? Still listening.",
                    err=True,
                )


def _print(topic: str, raw: bytes, message: dict[str, Any], as_json: bool) -> None:
    if as_json:
        print_lines([raw])
    else:
        click.echo(f"{message['time'][:-7]}Z  {topic}  {in_words(message)}")
