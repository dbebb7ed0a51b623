"""Where the database lies."""

from __future__ import annotations

from pathlib import Path

from driftwatch.store.errors import StoreUnreachableError

_SCHEME = "sqlite:///"


def database_path(url: str, base: Path) -> Path:
    """Return the absolute path of the database that a URL or a plain path names.

    Parameters
    ----------
    url : str
        ``sqlite:///name.db`` (relative to `base`), ``sqlite:////absolute/name.db``, or a path without scheme.
    base : Path
        Folder that a relative path starts from: that of the configuration, or the current one.

    Raises
    ------
    StoreUnreachableError
        When the URL names another kind of database, or no file.
    """
    name = url.removeprefix(_SCHEME)
    if "://" in name or not name or name == ":memory:":
        raise StoreUnreachableError(
            f"{url!r} names no file of a database; expected a path or {_SCHEME}PATH, such as {_SCHEME}driftwatch.db"
        )
    return (base / Path(name).expanduser()).absolute()
