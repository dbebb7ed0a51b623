"""What a running daemon may take over from a changed configuration, and what needs a restart.

Taken over are the bands of modes that are followed already, the settings of alerts, how long rows are kept, and how
much is logged: all of it judges or tells what was measured. Whatever decides what is measured, from which samples, and
where it goes, would make one run of two kinds of figures, so it needs a restart, which begins a run of its own.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from itertools import zip_longest
from typing import Any

from driftwatch.config.errors import Problem
from driftwatch.config.keys import Loc, place
from driftwatch.config.load import shown
from driftwatch.config.models import Configuration

REMEDY = "put it back, or restart the daemon to change it"

_NOTHING = object()
"""Stands for what is not in one of the two files."""


def reload_plan(old: Configuration, new: Configuration) -> list[str]:
    """Return why a running daemon cannot take over a new configuration; empty: it can.

    Parameters
    ----------
    old
        The configuration that the daemon runs on.
    new
        The one to take over, valid by itself. Whether it is served, ``config.unserved`` tells.

    Returns
    -------
    list of str
        One line for each key that differs and needs a restart, with the new value and the running one, in the order
        of the file's tables. Where a table is missing or new as a whole, one line for the table.

    Notes
    -----
    Values are compared, not texts: a default that is written out is no change. Tables with names are found by their
    names, so one that is inserted does not make all behind it look changed.
    """
    documents = _Pair(_document(old), _document(new))
    return [str(problem) for problem in documents.differences((), documents.old, documents.new)]


def _document(config: Configuration) -> dict[str, Any]:
    """Return what needs a restart of a configuration: all of it but what may be reloaded."""
    document: dict[str, Any] = config.model_dump(mode="json", by_alias=True)
    del document["alert"], document["daemon"]["log_level"], document["store"]["keep_days"]
    for mode in document["mode"]:
        del mode["band"]
    return document


class _Pair:
    """Two documents that are compared; differences are named as they stand in the new one, where they do."""

    def __init__(self, old: dict[str, Any], new: dict[str, Any]) -> None:
        self.old = old
        self.new = new

    def differences(self, loc: Loc, old: Any, new: Any, old_loc: Loc | None = None) -> Iterator[Problem]:
        """Yield what differs at a place, which may have been another one in the old document."""
        old_loc = loc if old_loc is None else old_loc
        if _is_table(old) and _is_table(new):
            yield from self._tables(loc, old_loc, old, new)
        elif _is_array(old) and _is_array(new) and old != new:
            yield from self._arrays(loc, old_loc, old, new)
        elif old != new:
            key = place(self.old, old_loc) if new is _NOTHING else place(self.new, loc)
            yield Problem(key, _words(new), f"{_words(old)}, as it runs", REMEDY)

    def _tables(self, loc: Loc, old_loc: Loc, old: Mapping[str, Any], new: Mapping[str, Any]) -> Iterator[Problem]:
        keys: Sequence[str] = list(dict.fromkeys([*new, *old]))
        if old.get("kind") != new.get("kind"):
            keys = ["kind"]  # all other keys follow from it
        for key in keys:
            was, now = old.get(key, _NOTHING), new.get(key, _NOTHING)
            yield from self.differences((*loc, key), was, now, (*old_loc, key))

    def _arrays(self, loc: Loc, old_loc: Loc, old: Sequence[Any], new: Sequence[Any]) -> Iterator[Problem]:
        pairs = list(_paired(old, new))
        for was, now in pairs:
            yield from self.differences(
                (*loc, -1 if now is None else now),
                _NOTHING if was is None else old[was],
                _NOTHING if now is None else new[now],
                (*old_loc, -1 if was is None else was),
            )
        both = [was for was, now in pairs if was is not None and now is not None]
        if both != sorted(both):
            came, ran = (", ".join(shown(item.get("name")) for item in items) for items in (new, old))
            yield Problem(place(self.new, loc), f"the order {came}", f"{ran}, as it runs", REMEDY)


def _is_table(value: Any) -> bool:
    return isinstance(value, Mapping)


def _is_array(value: Any) -> bool:
    """Say whether a value is an array of tables; an array of plain values is one value."""
    return isinstance(value, list) and all(isinstance(item, Mapping) for item in value)


def _words(value: Any) -> str:
    return "nothing" if value is None or value is _NOTHING else shown(value)


def _identity(item: Mapping[str, Any]) -> tuple[str, str] | None:
    """Return what tells a table from its siblings: the names of modes are unique on their channel only."""
    name = item.get("name")
    return None if name is None else (str(item.get("channel", "")).casefold(), str(name).casefold())


def _paired(
    old: Sequence[Mapping[str, Any]], new: Sequence[Mapping[str, Any]]
) -> Iterator[tuple[int | None, int | None]]:
    """Yield which table was which, as indices in the order of the new ones, then those that are gone.

    Those with the same name belong together; those left over were renamed, in order, as far as there are as many.
    """
    where = {_identity(item): index for index, item in enumerate(old) if _identity(item) is not None}
    found = {index: where[_identity(item)] for index, item in enumerate(new) if _identity(item) in where}
    left_new = [index for index in range(len(new)) if index not in found]
    left_old = [index for index in range(len(old)) if index not in found.values()]
    renamed = list(zip_longest(left_old, left_new))
    yield from sorted(
        [*((was, now) for now, was in found.items()), *((was, now) for was, now in renamed if now is not None)],
        key=lambda pair: pair[1],
    )
    yield from ((was, None) for was, now in renamed if now is None)
