"""A look at a daemon: its sign of life from the bus, and everything else from its store."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.board import Board, Verdict
from driftwatch.cli.figures import moment
from driftwatch.cli.listen import DEFAULT_ENDPOINT
from driftwatch.cli.view import key_of
from driftwatch.records import NS, time_text

if TYPE_CHECKING:
    from pathlib import Path

    from driftwatch.records import Envelope, Heartbeat
    from driftwatch.store.latest import Latest

    NextBeat = Callable[[float, Callable[[], bool]], Heartbeat | None]

_SLICE_S = 0.2  # longest wait between two looks at whether to stop


@dataclass(frozen=True, slots=True)
class Place:
    """Where to ask and to look, and what is expected there."""

    endpoint: str
    store: str
    modes: tuple[tuple[str, str], ...] = ()  # channel and mode; empty: not known
    silent_after_s: Mapping[tuple[str, str], float] = field(default_factory=dict)
    key: Path | None = None  # file of the key without which the daemon is not heard; None: everybody hears it


# ---------------------------------------------------------------------------------------------- the sign of life


@contextmanager
def listening(place: Place) -> Iterator[NextBeat]:
    """Give what waits so many seconds for the next heartbeat, or until told to stop; None: none came.

    Raises
    ------
    click.UsageError
        When the endpoint is malformed, or the key cannot be read.
    """
    import zmq

    from driftwatch.bus.client import reachable
    from driftwatch.bus.wire import HEARTBEAT
    from driftwatch.cli.listen_asking import Way, let_in

    endpoint = place.endpoint
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.RECONNECT_IVL_MAX, 1000)
        socket.setsockopt(zmq.IPV6, int(endpoint.startswith("tcp://[")))
        let_in(socket, Way(endpoint, key=place.key, guarded=place.key is not None))
        socket.setsockopt_string(zmq.SUBSCRIBE, HEARTBEAT)
        try:
            socket.connect(reachable(endpoint))
        except zmq.ZMQError as error:
            raise click.UsageError(
                f"{endpoint!r} cannot be listened to: {error}; expected tcp://HOST:PORT, such as {DEFAULT_ENDPOINT}"
            ) from None

        def next_beat(wait_s: float, stopped: Callable[[], bool]) -> Heartbeat | None:
            until = time.monotonic() + wait_s
            while not stopped() and (left := until - time.monotonic()) > 0:
                if socket.poll(round(min(left, _SLICE_S) * 1000) or 1):
                    raw = socket.recv_multipart()[-1]
                    while socket.poll(0):  # what waits behind it is newer
                        raw = socket.recv_multipart()[-1]
                    return _heartbeat(endpoint, raw)
            return None

        yield next_beat


def _heartbeat(endpoint: str, raw: bytes) -> Heartbeat:
    from driftwatch.bus.errors import WireError
    from driftwatch.bus.wire import decode_heartbeat

    try:
        message = json.loads(raw)
        if not isinstance(message, dict):
            raise WireError(f"{type(message).__name__}, no object")
        return decode_heartbeat(message)
    except (WireError, ValueError) as error:
        raise click.ClickException(
            f"{endpoint} sent {raw[:60]!r}, which is no heartbeat ({error}); "
            "expected a daemon of driftwatch there; check the endpoint"
        ) from None


# ---------------------------------------------------------------------------------------------- a look


@dataclass(frozen=True, slots=True)
class Look:
    """What one look found."""

    verdict: Verdict
    board: Board
    place: Place
    last: Latest | None = None  # without a sign of life: the run that the store heard of last
    told: str = ""  # without a sign of life: what the store says


class Looker:
    """Joins a heartbeat with what the store holds of its run.

    Parameters
    ----------
    place
        Where to look.
    wait_s
        How long a heartbeat was waited for, for the message that there is none.
    """

    def __init__(self, place: Place, wait_s: float) -> None:
        self._place = place
        self._wait_s = wait_s
        self._board = self._fresh()
        self._read: tuple[str, int] | None = None  # run and sequence up to which the board holds everything

    def look(self, heartbeat: Heartbeat | None) -> Look:
        """Return how things stand now."""
        return self._unreachable() if heartbeat is None else self._alive(heartbeat)

    def _fresh(self) -> Board:
        return Board(self._place.modes, self._place.silent_after_s)

    def _alive(self, heartbeat: Heartbeat) -> Look:
        after = self._read[1] if self._read is not None and self._read[0] == heartbeat.run else None
        latest, trouble = self._latest(heartbeat.run, after)
        if latest is None or latest.whole:
            self._board, self._read = self._fresh(), None
        board = self._board
        if latest is not None:
            board.take(latest.records)
            self._read = (latest.run, latest.sequence)
        board.beat(heartbeat)
        board.doubts = tuple(self._doubts(heartbeat, latest, trouble))
        return Look(board.verdict, board, self._place)

    def _doubts(self, heartbeat: Heartbeat, latest: Latest | None, trouble: str) -> Iterator[str]:
        """Yield why the store does not tell how things stand; a record is there before it is on the bus."""
        hint = "is this the daemon's store? --config or --store names another"
        if trouble:
            yield trouble
        elif latest is None:
            if heartbeat.sequence:
                yield f"{self._place.store} holds nothing of run {heartbeat.run[:8]}; {hint}"
        elif latest.sequence < heartbeat.sequence:
            yield (
                f"{self._place.store} ends at record {latest.sequence}, the daemon has published {heartbeat.sequence}; "
                f"{hint}"
            )

    def _latest(self, run: str | None, after: int | None) -> tuple[Latest | None, str]:
        """Return what the store holds of a run, and what is the matter with the store."""
        from driftwatch.store.errors import StoreError
        from driftwatch.store.queries import Reader

        try:
            with Reader.open(self._place.store) as reader:
                return reader.latest(run, after), ""
        except StoreError as error:
            return None, str(error)

    def _unreachable(self) -> Look:
        latest, trouble = self._latest(None, None)
        board, self._read = self._fresh(), None
        if latest is not None:
            board.take(latest.records)
        told = trouble or _last_heard(latest, board, self._place.store)
        return Look(Verdict.UNREACHABLE, board, self._place, latest, told)


def _last_heard(latest: Latest | None, board: Board, store: str) -> str:
    if latest is None:
        return f"{store} holds no run"
    end = (
        f"it ended: {board.ended.reason or 'no reason given'}" if board.ended else "it has no end: cut off, or hanging"
    )
    return (
        f"{store} last heard at {moment(latest.time_ns)} from run {latest.run[:8]} of {latest.station} "
        f"({latest.origin}); {end}"
    )


def object_of(look: Look) -> dict[str, Any]:
    """Return a look as JSON's own types; what stands is as on the bus, modes are worst first."""
    board, beat, last = look.board, look.board.heartbeat, look.last
    modes = [board.tracks.get(key_of(*names)) for names, _ in board.modes]
    return {
        "verdict": look.verdict.name.lower(),
        "exit": int(look.verdict),
        "endpoint": look.place.endpoint,
        "store": look.place.store,
        "station": board.station or None,
        "run": (board.run or None) if last is None else last.run,
        "origin": board.origin or None,
        "since": None if board.begun_ns is None else time_text(board.begun_ns),
        "time": time_text(board.now_ns if last is None else last.time_ns) if board.run else None,
        "uptime_s": beat and beat.uptime_s,
        "sample_age_s": beat and beat.sample_age_s,
        "queue_fill": beat and beat.queue_fill,
        "unsaved": beat and beat.unsaved,
        "unsaved_s": beat and beat.unsaved_s,
        "cannot_tell": [look.told] if look.told else board.not_told,
        "alerts": [_body(board.alerts[alert.alert]) for alert in (*board.standing, *board.untold)],
        "faults": [_body(board.incidents[fault.incident]) for fault in board.faults],
        "modes": [
            {"channel": names[0], "mode": names[1], "status": None, "last_seen_s": None}
            if envelope is None
            else _body(envelope) | {"last_seen_s": _age_s(track.last_measurement_ns if track else None, board.now_ns)}
            for (names, track), envelope in zip(board.modes, modes, strict=True)
        ],
    }


def _body(envelope: Envelope) -> dict[str, Any]:
    """Return a body as it stands on the wire, without the header but with its sequence and time."""
    from driftwatch.bus.wire import HEADER_FIELDS, encode

    message = encode(envelope)
    shared = set(HEADER_FIELDS) - {"sequence", "time"}
    return {name: value for name, value in message.items() if name not in shared}


def _age_s(then_ns: int | None, now_ns: int) -> float | None:
    return None if then_ns is None else (now_ns - then_ns) / NS
