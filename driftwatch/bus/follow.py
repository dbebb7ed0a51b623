"""Following a daemon without missing or repeating a record: what the bus carries, and what is asked for beside it.

It knows no socket and no clock. It rests on two promises: a record is in the store before it is on the bus, and a
heartbeat every second tells the number of the last one. So whatever shows that something was missed, the store has it
by then, and reading on from the last record that was had leads past it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

from driftwatch.bus.errors import BusError
from driftwatch.bus.holes import Hole
from driftwatch.bus.wire import HEARTBEAT, is_repeated

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

Message = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Place:
    """A record, by its numbers."""

    run: str  # UUID
    sequence: int

    @classmethod
    def of(cls, message: Mapping[str, Any]) -> Place:
        """Return the place of a record."""
        return cls(message["run"], message["sequence"])


class Since(Protocol):
    """Who can tell what was stored after a record."""

    def __call__(self, place: Place | None) -> Mapping[str, Any]:
        """Return the next page: ``records``, whether there is ``more``, and whether the run is ``known``.

        Raises
        ------
        BusError
            When nobody can be asked now.
        """
        ...


class Follower:
    """Hands on every record once and in order, from a place on.

    Parameters
    ----------
    since
        Asks for what was stored.
    put
        Takes the next records; what it took counts as had.
    told
        Takes what a person should know, a line each.
    place
        The last record that was had; None: none was.
    lasting
        True: without a place begin at the oldest record there is, and where nobody can be asked hand on nothing until
        somebody can. False: begin with what comes next, and then tell a hole and go on.
    """

    def __init__(
        self,
        since: Since,
        put: Callable[[Sequence[Message]], None],
        told: Callable[[str], None],
        place: Place | None = None,
        *,
        lasting: bool,
    ) -> None:
        self._since = since
        self._put = put
        self._told = told
        self._lasting = lasting
        self._passed = {place.run} if place else set()  # runs that were reached: what follows them was stored later
        self._had: set[str] = set()  # runs that the store tells of once more since it was begun with anew
        self._elsewhere: set[str] = set()  # runs that are published but not in the store that is asked
        self._told_of: set[str] = set()
        self.place = place

    def take(self, message: Message) -> None:
        """Take in what the bus carried."""
        if is_repeated(message):
            return
        came, is_record = Place.of(message), message["kind"] != HEARTBEAT
        if self.place is None and not self._lasting:
            self._begin(message, came, is_record)
        elif not self._is_news(came):
            return
        elif is_record and self._follows(came):
            self._hand_on([message])
        elif not (is_record and came.run in self._elsewhere):  # that is looked at again at each heartbeat
            self._catch_up(message, came, is_record)

    def _begin(self, message: Message, came: Place, is_record: bool) -> None:
        if is_record:
            self._hand_on([message])
        else:
            self._reach(came)

    def _follows(self, came: Place) -> bool:
        """Whether a record is the very next one."""
        return self.place is not None and came == Place(self.place.run, self.place.sequence + 1)

    def _is_news(self, came: Place) -> bool:
        """Whether something up to a record was not had yet."""
        if came.sequence == 0:  # a heartbeat before the first record
            return False
        if self.place is not None and came.run == self.place.run:
            return came.sequence > self.place.sequence
        return came.run not in self._passed

    def _catch_up(self, message: Message, came: Place, is_record: bool) -> None:
        try:
            self._read_on()
        except BusError as error:
            self._tell_once(str(error))
            if not self._lasting:
                self._skip(message, came, is_record)
            return
        if not self._is_news(came):
            self._told_of.clear()
            self._elsewhere.clear()
            return
        # It was published, so it was stored: not by the daemon that was asked, then, or it is there no more.
        is_same_run = self.place is not None and self.place.run == came.run
        if not is_same_run:
            self._elsewhere.add(came.run)
            self._tell_once(
                f"run {came.run} is published, but the daemon that is asked does not have it in its store; "
                "expected one daemon for both; check the endpoint, and whose key it is"
            )
        if is_same_run or not self._lasting:
            self._skip(message, came, is_record)

    def _read_on(self) -> None:
        more, place = True, self.place
        while more:
            page = self._since(place)
            if place is not None and not page.get("known", True):
                self._tell_once(
                    f"the store holds nothing any more of run {place.run}, the last one that was had; "
                    "going on at its oldest record"
                )
                self._had |= self._passed - {place.run}  # what the store still gets of that one is news
            records = page["records"]
            fresh = [one for one in records if one["run"] not in self._had]
            self._tell_holes(fresh)
            self._hand_on(fresh)
            more = page["more"] and bool(records)
            place = Place.of(records[-1]) if records else place

    def _tell_holes(self, records: Sequence[Message]) -> None:
        """Tell what the store itself does not hold: rows that were damaged or pruned."""
        last = self.place
        for came in map(Place.of, records):
            if last is not None and last.run == came.run and came.sequence > last.sequence + 1:
                self._told(f"Hole: {Hole(None, last.sequence, came.sequence)}")
            last = came

    def _skip(self, message: Message, came: Place, is_record: bool) -> None:
        """Tell what was missed, and go on with what came."""
        last = self.place
        if last is not None and last.run == came.run:
            before = came.sequence if is_record else came.sequence + 1
            if before > last.sequence + 1:
                self._told(f"Hole: {Hole(None, last.sequence, before)}")
        self._begin(message, came, is_record)

    def _hand_on(self, records: Sequence[Message]) -> None:
        if records:
            self._put(records)
            for record in records:
                self._passed.add(record["run"])
            self.place = Place.of(records[-1])

    def _reach(self, place: Place) -> None:
        self.place = place
        self._passed.add(place.run)

    def _tell_once(self, words: str) -> None:
        if words not in self._told_of:
            self._told_of.add(words)
            self._told(words)
