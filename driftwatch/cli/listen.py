"""Print what the bus carries, or write it to a file without missing or repeating anything."""

from __future__ import annotations

import json
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.figures import duration, in_words
from driftwatch.cli.looking import print_lines, quiet_pipe

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from driftwatch.cli.listen_asking import Way

DEFAULT_ENDPOINT = "tcp://127.0.0.1:5571"
QUIET_S = 5.0
"""Silence after which a listener is told, seconds; a daemon says every second that it lives."""

_QUEUED = 100_000


@click.command("listen")
@click.argument("endpoint", required=False)
@click.option("--topic", "topics", multiple=True, metavar="PREFIX", help="Only topics that begin so; may be repeated.")
@click.option("--count", type=click.IntRange(min=1), metavar="N", help="Stop after so many messages.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line, as it came.")
@click.option(
    "--into",
    metavar="FILE",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Write every record to FILE, a JSON line each, and go on there at the next start.",
)
@click.option(
    "--config",
    metavar="CONFIG",
    type=click.Path(),
    help="Listen to the daemon of this configuration, and ask it for what was missed.",
)
@click.option("--key", metavar="FILE", type=click.Path(path_type=Path), help="The same, with a key that was granted.")
@click.option("--schema", is_flag=True, help="Print the JSON Schema of all that the bus carries, and end.")
def command(  # noqa: PLR0913, RUF100 - one parameter an option
    endpoint: str | None,
    topics: tuple[str, ...],
    count: int | None,
    as_json: bool,
    into: Path | None,
    config: str | None,
    key: Path | None,
    schema: bool,
) -> None:
    """Print what a daemon publishes on ENDPOINT, until interrupted.

    First come the last values of everything, then what happens. ENDPOINT may be left out: the one of CONFIG, of the
    key, or tcp://127.0.0.1:5571. Silence is told on stderr, and so is what was missed, where it cannot be asked for.

    With --into, FILE will hold every record that the daemon's store holds, from the oldest on, each exactly once and
    in order, however often this command or the daemon is ended or killed in between, as long as the records are not
    pruned before they are fetched. While the daemon is away, the listener waits. Heartbeats and last values are not
    written. It needs --config or --key.

    \b
    Example: driftwatch listen tcp://127.0.0.1:5571 --topic alert/ --topic track/drive_end/
    Example: driftwatch listen --config config/demo.toml --into records.jsonl
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    if schema:
        _print_schema()
        return
    from driftwatch.cli.listen_asking import way_to

    way = way_to(endpoint, config, key)
    if into is None:
        _print_all(way, topics, count, as_json)
        return
    if as_json or way.key is None:
        raise click.UsageError(
            "got --into with --json; expected one of them: a file is always JSON lines; leave out --json"
            if as_json
            else "got --into without a way to ask for what was missed; expected --config CONFIG or --key FILE; add one"
        )
    _write_all(way, topics, count, into)


def _print_schema() -> None:
    from driftwatch.bus.schema import schema

    with quiet_pipe():
        click.echo(json.dumps(schema(), indent=2, ensure_ascii=False))


# ---------------------------------------------------------------------------------------------- into a file


def _write_all(way: Way, topics: tuple[str, ...], count: int | None, path: Path) -> None:
    from driftwatch.bus.follow import Follower
    from driftwatch.cli.listen_asking import StoredSince
    from driftwatch.cli.record_file import RecordFile

    written = 0
    with RecordFile(path) as file, StoredSince(way) as since:

        def put(records: Sequence[dict[str, Any]]) -> None:
            nonlocal written
            wanted = [one for one in records if not topics or _topic_in(one).startswith(topics)]
            wanted = wanted if count is None else wanted[: count - written]
            file.append(wanted)
            written += len(wanted)
            if written == count:
                raise _EnoughError

        follower = Follower(since, put, _tell, file.place, lasting=True)
        try:
            for _, raw in _messages(way, ()):
                follower.take(_object(way.endpoint, raw))
        except (KeyboardInterrupt, _EnoughError):
            click.echo(f"{written} records.", err=True)


class _EnoughError(Exception):
    """As many as were asked for have come."""


def _topic_in(message: dict[str, Any]) -> str:
    """Return the topic on which a record is published; its kind alone, where this version does not know that."""
    from driftwatch.bus.errors import WireError
    from driftwatch.bus.wire import decode
    from driftwatch.records import topic_of

    try:
        return topic_of(decode(message).body)
    except WireError:
        return str(message["kind"])


def _tell(words: str) -> None:
    click.echo(words, err=True)


# ---------------------------------------------------------------------------------------------- printing


def _print_all(way: Way, topics: tuple[str, ...], count: int | None, as_json: bool) -> None:
    printed = 0
    try:
        with quiet_pipe(), ExitStack() as stack:
            heard = _live(way, topics) if way.key is None else _whole(way, stack)
            for topic, raw, message in heard:
                if topics and not topic.startswith(topics):
                    continue
                _print(topic, raw, message, as_json)
                printed += 1
                if printed == count:
                    break
    except KeyboardInterrupt:
        click.echo(f"{printed} messages.", err=True)


_Heard = tuple[str, bytes, dict[str, Any]]
"""Topic, line and object."""


def _live(way: Way, topics: tuple[str, ...]) -> Iterator[_Heard]:
    """Yield what comes, and tell holes."""
    from driftwatch.bus.holes import HoleFinder

    holes, shown = HoleFinder(everything=not topics), Shown()
    for topic, raw in _messages(way, topics):
        message = _object(way.endpoint, raw)
        if hole := holes.seen(topic, message):
            _tell(f"Hole: {hole}")
        if shown.is_new(topic, message):
            yield topic, raw, message


def _whole(way: Way, stack: ExitStack) -> Iterator[_Heard]:
    """Yield what comes, with what was missed in its place."""
    from driftwatch.bus.follow import Follower
    from driftwatch.bus.wire import HEARTBEAT, is_repeated, line_of
    from driftwatch.cli.listen_asking import StoredSince

    taken: list[dict[str, Any]] = []
    follower = Follower(stack.enter_context(StoredSince(way)), taken.extend, _tell, lasting=False)
    shown = Shown()
    for topic, raw in _messages(way, ()):
        message = _object(way.endpoint, raw)
        before = follower.place
        follower.take(message)
        for record in taken:
            its_topic = _topic_in(record)
            if shown.is_new(its_topic, record):
                yield its_topic, raw if record is message else line_of(record), record
        taken.clear()
        if is_repeated(message):
            # Of what is to come as a record a last value says nothing.
            came = (message["run"], message["sequence"])
            is_past = before is None or (before.run == came[0] and came[1] <= before.sequence)
            if is_past and shown.is_new(topic, message):
                yield topic, raw, message
        elif message["kind"] == HEARTBEAT:
            yield topic, raw, message


class Shown:
    """What was shown last of each topic, so that a value which is sent again for others is not shown again."""

    def __init__(self) -> None:
        self._last: dict[str, tuple[str, int]] = {}

    def is_new(self, topic: str, message: dict[str, Any]) -> bool:
        """Take in a message; return whether it is to be shown."""
        from driftwatch.bus.wire import HEARTBEAT, is_repeated

        if message["kind"] == HEARTBEAT:
            return True
        run, sequence = self._last.get(topic, ("", 0))
        if is_repeated(message) and message["run"] == run and message["sequence"] <= sequence:
            return False
        self._last[topic] = (message["run"], message["sequence"])
        return True


def _print(topic: str, raw: bytes, message: dict[str, Any], as_json: bool) -> None:
    if as_json:
        print_lines([raw])
    else:
        again = "  (last value)" if message.get("repeated") else ""
        click.echo(f"{message['time'][:-7]}Z  {topic}  {in_words(message)}{again}")


# ---------------------------------------------------------------------------------------------- what comes


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


def _messages(way: Way, topics: tuple[str, ...]) -> Iterator[tuple[str, bytes]]:
    """Yield topics and objects; tell on stderr when nothing comes, be it a heartbeat, for `QUIET_S`."""
    import zmq

    from driftwatch.bus.client import reachable
    from driftwatch.cli.listen_asking import let_in

    endpoint = way.endpoint
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.RCVHWM, _QUEUED)
        socket.setsockopt(zmq.IPV6, int(endpoint.startswith("tcp://[")))
        let_in(socket, way)
        for topic in (*topics, "heartbeat") if topics else ("",):
            socket.setsockopt_string(zmq.SUBSCRIBE, topic)
        try:
            socket.connect(reachable(endpoint))
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
