"""The control protocol: what is answered to whom, and when. It knows no socket, no thread and no clock.

Looks are answered at once. What changes something is handed on and answered when it is stored, or after `PATIENCE_S`
with how far it has come. The same request again is not done again: it gets the same answer.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Generic, TypeVar

from driftwatch.bus.request import Request, RequestError, may, parse_request
from driftwatch.bus.sparing import Allowance

if TYPE_CHECKING:
    from driftwatch.bus.keys import Granted
    from driftwatch.records import CommandDone

PATIENCE_S = 0.8
"""How long an answer waits for its command to be stored, seconds: an asker hears within a second."""

REQUESTS_PER_S, REQUESTS_AT_ONCE = 20.0, 40.0
"""Of one key."""

MOST_PENDING = 256
"""Commands that are not stored yet; more are refused."""

MOST_REMEMBERED = 1000
"""Answers kept at hand; older ones are found in the store."""

Reply = dict[str, Any]
Sender = TypeVar("Sender")


class LookFailedError(Exception):
    """A look could not be answered; its words are the reply's."""


@dataclass(frozen=True, slots=True)
class Order:
    """A request that changes something, for whoever carries it out."""

    request: Request
    by: str  # who, as it is recorded


@dataclass(frozen=True, slots=True)
class Progress:
    """How far an order has come."""

    request: str  # its id
    outcome: str  # what came of it, in words
    stored: bool  # it and what it did are in the store


@dataclass(frozen=True, slots=True)
class Behind:
    """What stands behind a clerk.

    Attributes
    ----------
    look
        Answers a request that changes nothing, with the fields of the reply; raises `LookFailedError`.
    submit
        Takes an order that changes something; returns why not, in words, or None: it was taken.
    known
        Returns the record of a command by the id of its request, from the store; None: there is none, or it cannot
        be told.
    told
        Takes what is worth a sparse line in the log: its kind and its words.
    """

    look: Callable[[Request], Reply]
    submit: Callable[[Order], str | None]
    known: Callable[[str], CommandDone | None]
    told: Callable[[str, str], None]


_Mark = tuple[object, ...]
"""What two requests of the same id must share to be the same."""


@dataclass(slots=True)
class _Pending(Generic[Sender]):
    mark: _Mark
    answer_by: float
    waiting: list[Sender]
    outcome: str | None = None  # None: not carried out yet


@dataclass(slots=True)
class Counts:
    """What came, since the start."""

    answered: int = 0
    refused: dict[str, int] = field(default_factory=dict)  # by fault


class Clerk(Generic[Sender]):
    """Decides on every message; whoever drives it sends the replies that its methods return.

    Parameters
    ----------
    behind
        What stands behind it.

    Times are seconds of one monotonic clock.
    """

    def __init__(self, behind: Behind) -> None:
        self._behind = behind
        self._allowances: dict[str, Allowance] = {}
        self._pending: dict[str, _Pending[Sender]] = {}
        self._answered: OrderedDict[str, tuple[_Mark, Reply]] = OrderedDict()
        self.counts = Counts()

    # ------------------------------------------------------------------------------------------ what comes

    def hear(self, sender: Sender, holder: Granted | None, raw: bytes, now: float) -> Iterable[tuple[Sender, Reply]]:
        """Take in a message; `holder` is whose key it came with, None where that may come in no more."""
        if holder is None:
            return [(sender, self._refused("key", "a request with a revoked key", "this key is granted no more"))]
        if not self._allowance(holder).take(now):
            words = f"more than {REQUESTS_PER_S:g} requests a second; wait a moment"
            return [(sender, self._refused("rate", f"requests of {holder.name}: too many", words, of=holder))]
        try:
            request = parse_request(raw)
        except RequestError as error:
            told = f"a request of {holder.name} that is none"
            return [(sender, self._refused("malformed", told, str(error), error.request, of=holder))]
        if not may(holder.role, request.action):
            words = f"the key {holder.name!r} may only {holder.role}; expected one that may operate"
            told = f"{request.action} by {by_of(request, holder)}: the key may only {holder.role}"
            return [(sender, self._refused("right", told, words, request.request, of=holder))]
        reply = self._answer(sender, request, by_of(request, holder), now)
        return [] if reply is None else [(sender, reply)]

    def _allowance(self, holder: Granted) -> Allowance:
        return self._allowances.setdefault(holder.name, Allowance(REQUESTS_PER_S, REQUESTS_AT_ONCE))

    def _answer(self, sender: Sender, request: Request, by: str, now: float) -> Reply | None:
        """Return the reply to a request that may be made; None: it comes later."""
        if request.action in ("status", "since"):
            return self._look(request)
        mark = _mark(request.action, by, request.target, request.reason, request.value, request.unit)
        pending = self._pending.get(request.request)
        if pending is not None:
            if pending.mark != mark:
                return self._reused(request)
            if not pending.waiting:  # those before were told how far it was
                pending.answer_by = now + PATIENCE_S
            pending.waiting.append(sender)
            return None
        return self._again(request, mark) or self._submit(sender, Order(request, by), mark, now)

    def _look(self, request: Request) -> Reply:
        try:
            found = self._behind.look(request)
        except LookFailedError as error:
            return self._refused("failed", None, str(error), request.request)
        self.counts.answered += 1
        if request.action == "status":
            found = {**found, "requests": {"answered": self.counts.answered, "refused": dict(self.counts.refused)}}
        return {"request": request.request, "ok": True, "outcome": "done", **found}

    def _again(self, request: Request, mark: _Mark) -> Reply | None:
        """Return the reply that the same request got before; None: there was none."""
        before = self._answered.get(request.request)
        if before is None and (done := self._behind.known(request.request)) is not None:
            was = _mark(done.action, done.by, done.target, done.reason, done.value, done.unit)
            before = (was, _reply(request.request, done.outcome or "not known", stored=True))
        if before is None:
            return None
        return before[1] if before[0] == mark else self._reused(request)

    def _reused(self, request: Request) -> Reply:
        words = f"the id {request.request!r} was used for another request; expected an id of its own for each"
        return self._refused("reused", None, words, request.request)

    def _submit(self, sender: Sender, order: Order, mark: _Mark, now: float) -> Reply | None:
        if len(self._pending) >= MOST_PENDING:
            why: str | None = f"{MOST_PENDING} commands wait to be stored; ask again later"
        else:
            why = self._behind.submit(order)
        if why is not None:
            return self._refused("busy", f"{order.request.action} by {order.by}: {why}", why, order.request.request)
        self._pending[order.request.request] = _Pending(mark, now + PATIENCE_S, [sender])
        return None

    def _refused(
        self, fault: str, told: str | None, words: str, request: str | None = None, *, of: Granted | None = None
    ) -> Reply:
        self.counts.refused[fault] = self.counts.refused.get(fault, 0) + 1
        if told is not None:  # each key for itself: none may hide in the crowd of another
            self._behind.told(fault if of is None else f"{fault} of {of.name}", f"Refused: {told}")
        return {"request": request, "ok": False, "fault": fault, "outcome": f"refused: {words}"}

    # ------------------------------------------------------------------------------------------ what comes of it

    def progress(self, news: Progress) -> Iterable[tuple[Sender, Reply]]:
        """Take in how far an order has come."""
        pending = self._pending.get(news.request)
        if pending is None:
            return
        pending.outcome = news.outcome
        if news.stored:
            del self._pending[news.request]
            reply = _reply(news.request, news.outcome, stored=True)
            self._answered[news.request] = (pending.mark, reply)
            while len(self._answered) > MOST_REMEMBERED:
                self._answered.popitem(last=False)
            yield from self._tell(pending, reply)

    def due(self, now: float) -> Iterator[tuple[Sender, Reply]]:
        """Yield the replies that must not wait any longer."""
        for identity, pending in self._pending.items():
            if pending.waiting and now >= pending.answer_by:
                yield from self._tell(pending, _unstored(identity, pending.outcome))

    def close(self) -> Iterator[tuple[Sender, Reply]]:
        """Yield the last replies: the daemon ends."""
        for identity, pending in self._pending.items():
            if pending.outcome is None:
                reply = self._refused("busy", None, "the daemon is ending; nothing was done", identity)
            else:
                reply = _unstored(identity, pending.outcome)
            yield from self._tell(pending, reply)

    def _tell(self, pending: _Pending[Sender], reply: Reply) -> Iterator[tuple[Sender, Reply]]:
        waiting, pending.waiting = pending.waiting, []
        self.counts.answered += len(waiting)
        for sender in waiting:
            yield sender, reply


def by_of(request: Request, holder: Granted) -> str:
    """Return who asks, as it is recorded: the key, and the person where the asker says who."""
    return holder.name if request.by in (None, holder.name) else f"{request.by} ({holder.name})"


def _mark(action: str, by: str, *rest: object) -> _Mark:
    # What a reload is recorded with as its target is the file, which the asker did not name.
    return (action, by, rest[1]) if action in ("reload", "stop") else (action, by, *rest)


def _reply(request: str, outcome: str, *, stored: bool) -> Reply:
    return {"request": request, "ok": not outcome.startswith("refused"), "outcome": outcome, "stored": stored}


def _unstored(request: str, outcome: str | None) -> Reply:
    again = "the same request again tells what came of it"
    words = f"{outcome}; not stored yet; {again}" if outcome else f"taken, but not carried out yet; {again}"
    return _reply(request, words, stored=False)
