"""Who may come in: the daemon's key pair, its own user's, and those that were granted to others.

::

    keys/              mode 0700, in the state folder
      daemon.json      the daemon's pair: its secret half decrypts, its public half is how others know it
      operator.json    the pair of the user who runs the daemon, for the command line; a `ClientKey`
      granted.json     name, role, public half and time of every key that was granted

All files have mode 0600 and are exchanged as a whole: a reader sees the old one or the new one.
"""

from __future__ import annotations

import fcntl
import os
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass, field
from enum import StrEnum
from typing import TYPE_CHECKING, Any

from pydantic import TypeAdapter, ValidationError

from driftwatch.bus.errors import KeysError, NoKeyError
from driftwatch.bus.keyfiles import (
    FOLDER_MODE,
    SCHEMA,
    damaged,
    give_to_owner_of,
    is_half,
    read_document,
    refuse_open,
    unusable,
    write_document,
)
from driftwatch.config.values import Name
from driftwatch.records import parse_time, time_text

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

FOLDER_NAME = "keys"
"""In the state folder."""

DAEMON_NAME, OPERATOR_NAME, GRANTED_NAME = "daemon.json", "operator.json", "granted.json"


class Role(StrEnum):
    """What a key may ask for."""

    LOOK = "look"  # listen, and ask how things stand
    OPERATE = "operate"  # and give commands


@dataclass(frozen=True, slots=True)
class Pair:
    """A CURVE key pair, each half as 40 characters (Z85)."""

    public: str
    secret: str = field(repr=False)  # in no log

    @property
    def as_bytes(self) -> tuple[bytes, bytes]:
        """Public and secret half as sockets want them."""
        return self.public.encode("ascii"), self.secret.encode("ascii")


@dataclass(frozen=True, slots=True)
class Granted:
    """A key that may come in."""

    name: str
    role: Role
    public: str
    granted_ns: int  # when, UTC


@dataclass(frozen=True, slots=True)
class ClientKey:
    """All that somebody needs to come in."""

    name: str
    role: Role
    public: str
    secret: str = field(repr=False)  # in no log
    daemon: str  # the daemon's public half
    control: str | None  # where it takes commands; None: not known, it never ran
    publish: str | None  # where it publishes

    @classmethod
    def read(cls, path: Path) -> ClientKey:
        """Return the key in a file.

        Raises
        ------
        NoKeyError
            When there is no such file.
        KeysError
            When others may read it, or it holds no key.
        """
        document = read_document(path)
        try:
            return cls(
                _text(document, "name"),
                Role(_text(document, "role")),
                _half(document, "public"),
                _half(document, "secret"),
                _half(document, "daemon"),
                _endpoint(document, "control"),
                _endpoint(document, "publish"),
            )
        except (KeyError, TypeError, ValueError) as error:
            raise damaged(path, error) from None

    def write(self, path: Path, *, new: bool = False) -> None:
        """Write it to a file that only its owner may read; `new`: refuse to write over one.

        Raises
        ------
        KeysError
            When it cannot be written.
        """
        write_document(path, {"schema": SCHEMA, **asdict(self)}, new=new)


def new_pair() -> Pair:
    """Return a pair that nobody else has."""
    import zmq

    public, secret = zmq.curve_keypair()
    return Pair(public.decode("ascii"), secret.decode("ascii"))


def checked_name(text: str) -> str:
    """Return the name of a key.

    Raises
    ------
    KeysError
        When it is none.
    """
    try:
        return TypeAdapter(Name).validate_python(text)
    except ValidationError:
        raise KeysError(
            f"got the name {text!r}; expected 1 to 64 letters, digits, spaces, . or -, not beginning or ending with a "
            "space; choose another name"
        ) from None


class KeyFolder:
    """The keys of one daemon.

    Parameters
    ----------
    state
        Its state folder; the keys lie in ``keys`` there.

    Every method raises `KeysError` when the folder or a file is open to others, damaged, or cannot be used.
    """

    def __init__(self, state: Path) -> None:
        self.path = state / FOLDER_NAME
        self.operator_path = self.path / OPERATOR_NAME
        self.granted_path = self.path / GRANTED_NAME
        self._daemon_path = self.path / DAEMON_NAME
        self._made: list[Path] = []

    def ensure(self, user: str) -> None:
        """Make what is not there: the folder, the daemon's pair, and the pair of its user, called `user`."""
        self._make_folder()
        with self._locked():
            if not self._daemon_path.exists():
                pair = new_pair()
                write_document(self._daemon_path, {"schema": SCHEMA, **asdict(pair)}, new=True)
                self._made.append(self._daemon_path)
            if not self.operator_path.exists():
                pair, daemon = new_pair(), self.daemon().public
                operator = ClientKey(user, Role.OPERATE, pair.public, pair.secret, daemon, None, None)
                operator.write(self.operator_path, new=True)
                self._made.append(self.operator_path)

    def discard(self) -> None:
        """Take away what `ensure` made, since nothing came of the start; not if a key was granted by it meanwhile."""
        made, self._made = self._made, []
        if not made:
            return
        # Where the folder cannot be had, the keys stay: the next start uses them.
        with suppress(OSError, KeysError), self._locked():
            if self.granted_path.exists():
                return
            for path in reversed(made):
                path.rmdir() if path == self.path else path.unlink()

    def daemon(self) -> Pair:
        """Return the daemon's pair."""
        document = read_document(self._daemon_path)
        try:
            return Pair(_half(document, "public"), _half(document, "secret"))
        except (KeyError, TypeError, ValueError) as error:
            raise damaged(self._daemon_path, error) from None

    def operator(self) -> ClientKey:
        """Return the key of the user who runs the daemon."""
        return ClientKey.read(self.operator_path)

    def tell_operator(self, control: str, publish: str) -> None:
        """Write down for the user's command line where the daemon is."""
        with self._locked():
            old = self.operator()
            if (old.control, old.publish) != (control, publish):
                new = ClientKey(old.name, old.role, old.public, old.secret, old.daemon, control, publish)
                new.write(self.operator_path)

    def granted(self) -> tuple[Granted, ...]:
        """Return the keys that were granted, in that order; none where there is no folder yet."""
        try:
            document = read_document(self.granted_path)
        except NoKeyError:
            return ()
        try:
            return tuple(_granted(item) for item in document["granted"])
        except (KeyError, TypeError, ValueError) as error:
            raise damaged(self.granted_path, error) from None

    def grant(self, name: str, role: Role, at_ns: int, where: tuple[str | None, str | None], out: Path) -> ClientKey:
        """Make a key, write it to a new file and let it in; `where` are the endpoints for control and publication.

        Raises
        ------
        KeysError
            When the name is none or is taken, or the file is there already.
        """
        with self._locked():
            granted = self.granted()
            name = checked_name(name)
            taken = [one.name for one in granted if one.name.casefold() == name.casefold()]
            operator = self.operator().name
            if taken or operator.casefold() == name.casefold():
                raise KeysError(
                    f"{self.path}: a key is called {taken[0] if taken else operator!r} already; expected a name of its "
                    "own for each key; choose another, or revoke that one first"
                )
            pair = new_pair()
            key = ClientKey(name, role, pair.public, pair.secret, self.daemon().public, *where)
            key.write(out, new=True)
            try:
                self._write_granted((*granted, Granted(name, role, pair.public, at_ns)))
            except BaseException:
                out.unlink()  # it would open nothing
                raise
        return key

    def revoke(self, name: str) -> Granted:
        """Let a key in no more, and return it.

        Raises
        ------
        KeysError
            When there is none of that name; names those there are.
        """
        with self._locked():
            granted = self.granted()
            found = [one for one in granted if one.name.casefold() == name.strip().casefold()]
            if not found:
                names = ", ".join(one.name for one in granted) or "none"
                raise KeysError(f"{self.path}: no granted key is called {name!r}; expected one of: {names}")
            self._write_granted(tuple(one for one in granted if one not in found))
        return found[0]

    def _write_granted(self, granted: tuple[Granted, ...]) -> None:
        items = [
            {"name": one.name, "role": one.role, "public": one.public, "granted": time_text(one.granted_ns)}
            for one in granted
        ]
        write_document(self.granted_path, {"schema": SCHEMA, "granted": items})

    def _make_folder(self) -> None:
        try:
            self.path.mkdir(FOLDER_MODE)
            made = os.open(self.path, os.O_RDONLY | os.O_DIRECTORY)
            try:
                give_to_owner_of(self.path.parent, made)
            finally:
                os.close(made)
        except FileExistsError:
            return
        except OSError as error:
            raise unusable(self.path, error) from None
        self._made.append(self.path)

    @contextmanager
    def _locked(self) -> Iterator[None]:
        """Let nobody else change the folder meanwhile, and refuse one that is open to others."""
        try:
            folder = os.open(self.path, os.O_RDONLY | os.O_DIRECTORY)
        except OSError as error:
            raise unusable(self.path, error) from None
        try:
            found = os.fstat(folder)
            refuse_open(self.path, found.st_mode)
            if found.st_uid not in (os.geteuid(), self.path.parent.stat().st_uid):
                raise KeysError(
                    f"{self.path} belongs to user {found.st_uid}; expected the user who runs the daemon: whoever "
                    "made it could read the keys; see who did, then move it away"
                )
            fcntl.flock(folder, fcntl.LOCK_EX)
            yield
        finally:
            os.close(folder)


# ---------------------------------------------------------------------------------------------- values


def _text(document: dict[str, Any], name: str) -> str:
    value = document[name]
    if not isinstance(value, str):
        raise TypeError(f"{name} is no text")
    return value


def _half(document: dict[str, Any], name: str) -> str:
    value = _text(document, name)
    if not is_half(value):
        raise ValueError(f"{name} is no key of 40 characters")
    return value


def _endpoint(document: dict[str, Any], name: str) -> str | None:
    return None if document.get(name) is None else _text(document, name)


def _granted(item: Any) -> Granted:
    if not isinstance(item, dict):
        raise TypeError("what was granted is no table")
    role = Role(_text(item, "role"))
    return Granted(_text(item, "name"), role, _half(item, "public"), parse_time(_text(item, "granted")))
