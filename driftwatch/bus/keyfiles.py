"""Files of keys: read only where nobody else may, exchanged as a whole."""

from __future__ import annotations

import json
import os
import secrets
import stat
from functools import reduce
from typing import TYPE_CHECKING, Any

from driftwatch.bus.errors import KeysError, NoKeyError

if TYPE_CHECKING:
    from pathlib import Path

FOLDER_MODE, FILE_MODE = 0o700, 0o600

SCHEMA = 1
"""Of the files."""

LARGEST_FILE = 4_000_000
"""Bytes; about 20,000 keys."""

GRANT_REMEDY = "have one made with `driftwatch keys grant NAME --role look|operate` where the daemon runs"


def read_document(path: Path) -> dict[str, Any]:
    """Return the object in a file that only its owner may read.

    Raises
    ------
    NoKeyError
        When there is no such file.
    KeysError
        When others may read it, it cannot be read, or it holds no object of `SCHEMA`.
    """
    try:
        with path.open("rb") as file:
            refuse_open(path, os.fstat(file.fileno()).st_mode)
            raw = file.read(LARGEST_FILE)
    except FileNotFoundError:
        raise NoKeyError(f"{path}: there is no such file; expected a key; {GRANT_REMEDY}") from None
    except OSError as error:
        raise unusable(path, error) from None
    try:
        document = json.loads(raw)
    except (ValueError, RecursionError) as error:
        raise damaged(path, error) from None
    if not isinstance(document, dict) or document.get("schema") != SCHEMA:
        raise damaged(path, f"expected an object with schema {SCHEMA}")
    return document


def write_document(path: Path, document: dict[str, Any], *, new: bool = False) -> None:
    """Put a whole file in place of the old one, or make a `new` one; it is on the disk on return, and so is its name.

    Raises
    ------
    KeysError
        When it cannot be written, or is there although a new one is to be made.
    """
    text = json.dumps(document, ensure_ascii=False, indent=2) + "\n"
    draft = path.with_name(f".{path.name}.{secrets.token_hex(4)}")
    try:
        with os.fdopen(os.open(draft, os.O_WRONLY | os.O_CREAT | os.O_EXCL, FILE_MODE), "w", encoding="utf-8") as file:
            give_to_owner_of(path.parent, file.fileno())
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        if new:
            os.link(draft, path)  # refuses where there is one, whoever made it meanwhile
        else:
            draft.replace(path)
        _fsync_folder(path.parent)  # else a power cut could bring the old file back, and a revoked key with it
    except FileExistsError:
        raise KeysError(f"{path} is there already; expected to make a new file; name another, or move it") from None
    except OSError as error:
        raise unusable(path, error) from None
    finally:
        draft.unlink(missing_ok=True)


def _fsync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def give_to_owner_of(folder: Path, made: int) -> None:
    """Let what root made, an open file or folder, be its whose folder it lies in: the daemon need not be root."""
    if os.geteuid() == 0:
        owner = folder.stat()
        os.fchown(made, owner.st_uid, owner.st_gid)


def refuse_open(path: Path, mode: int) -> None:
    """Refuse a file or a folder whose mode lets others in; raise `KeysError`."""
    if mode & (stat.S_IRWXG | stat.S_IRWXO):
        wanted = FOLDER_MODE if stat.S_ISDIR(mode) else FILE_MODE
        raise KeysError(
            f"{path} has mode {stat.S_IMODE(mode):04o}, open to others; expected {wanted:04o}, for its owner alone; "
            f"see who read it, then chmod {wanted:o} it"
        )


def unusable(path: Path, error: OSError) -> KeysError:
    """Return what is said of a path that the system refuses."""
    return KeysError(
        f"{path}: got {error.strerror or error}; expected a place for keys that its owner may read and write; run as "
        "the user who runs the daemon, or name another state folder"
    )


def damaged(path: Path, why: object) -> KeysError:
    """Return what is said of a file that holds something else."""
    return KeysError(f"{path} holds no keys: {why}; expected what driftwatch wrote there; {GRANT_REMEDY}")


def is_half(text: str) -> bool:
    """Say whether a text is half of a CURVE key pair: 40 characters (Z85, ZeroMQ RFC 32) that stand for 32 bytes."""
    digits = [_Z85.find(character) for character in text]
    groups = [digits[begin : begin + 5] for begin in range(0, len(digits), 5)]
    return len(digits) == 40 and min(digits) >= 0 and all(reduce(_append, group) < 2**32 for group in groups)


def _append(number: int, digit: int) -> int:
    return number * len(_Z85) + digit


_Z85 = "0123456789abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ.-:+=^!/*?&<>()[]{}@%$#"
