"""A folder that cannot be looked into for a while is no folder without a database: it is waited for."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from driftwatch.config import loads
from driftwatch.daemon.keeper import GONE_S, Keeper
from driftwatch.daemon.offline import carry_out
from driftwatch.records import Command, Envelope
from driftwatch.store.care import info
from driftwatch.store.errors import CommitError, StoreUnreachableError, Trouble, cannot_look
from driftwatch.store.lock import WriterLock
from driftwatch.store.opening import file_at
from driftwatch.store.queries import Reader
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]
CONFIG = loads(
    'schema = 1\n[station]\nname = "s"\n[[channel]]\nname = "a"\n'
    '[[mode]]\nname = "m"\nchannel = "a"\nsearch_hz = [80.0, 160.0]\n'
)


class Hidden:
    """A folder that this process may use until it is hidden, also where the tests run as root."""

    def __init__(self, folder: Path) -> None:
        self.path = folder / "a.db"
        self._folder = folder
        self._user = os.geteuid()
        self.show()

    def _mode(self, mode: int) -> None:
        os.seteuid(self._user)
        self._folder.chmod(mode)
        if self._user == 0:
            os.seteuid(65_534)

    def hide(self) -> None:
        self._mode(0)

    def show(self) -> None:
        self._mode(0o777)

    def close(self) -> None:
        self.show()
        os.seteuid(self._user)


@pytest.fixture
def hidden(tmp_path: Path) -> Iterator[Hidden]:
    folder = tmp_path / "state"
    folder.mkdir()
    for parent in folder.parents[:3]:  # pytest makes them for its own user only
        parent.chmod(parent.stat().st_mode | 0o055)
    found = Hidden(folder)
    yield found
    found.close()


def test_a_live_run_waits_for_a_folder_that_it_may_not_look_into_and_stores_everything(
    hidden: Hidden, measurement: Make
) -> None:
    with Writer.open_live(hidden.path, WriterLock(hidden.path, "s")) as writer:
        keeper = Keeper(writer, is_patient=True)
        keeper.take([measurement(1)])
        keeper.flush_due(0.0)
        hidden.hide()
        for number in range(2, 12):  # far longer than a file that is gone is waited for
            keeper.take([measurement(number)])
            keeper.flush_due(number * GONE_S)
            assert keeper.trouble is Trouble.READ_ONLY
        hidden.show()
        keeper.flush_due(100.0)
        assert keeper.trouble is None
    begin, _ = keeper.news()
    assert "cannot be looked at: Permission denied; change the permissions of its folder" in begin.words
    assert {file.name for file in hidden.path.parent.iterdir()} <= {"a.db", "a.db.lock"}  # and none beside it
    with Reader.open(hidden.path) as reader:
        assert [one.sequence for one in reader.records("measurement")] == list(range(1, 12))


def test_a_run_whose_file_was_taken_away_waits_for_a_folder_that_it_may_not_look_into(
    hidden: Hidden, measurement: Make
) -> None:
    with Writer.open_live(hidden.path, WriterLock(hidden.path, "s")) as writer:
        hidden.path.unlink()
        hidden.hide()
        with pytest.raises(CommitError):
            writer.begin_after_loss()
        hidden.show()
        writer.begin_after_loss()
        writer.write([measurement(1)])
        hidden.hide()
        with pytest.raises(StoreUnreachableError):
            writer._lock.renew()
        hidden.show()
    with Reader.open(hidden.path) as reader:
        assert len(list(reader.records("measurement"))) == 1


@pytest.mark.parametrize(
    "opened",
    [
        lambda path: Writer.open(path, "s"),
        lambda path: Writer.open_live(path, WriterLock(path, "s")),
        lambda path: WriterLock(path, "s"),
        Reader.open,
        info,
        lambda path: carry_out(CONFIG, Command(0, "r1", "ann", "note", None, "hello"), str(path)),
    ],
    ids=["writer", "live writer", "lock", "reader", "info", "command without a daemon"],
)
def test_whoever_opens_what_may_not_be_looked_at_hears_why(hidden: Hidden, opened: Callable[[Path], object]) -> None:
    hidden.hide()
    with pytest.raises(StoreUnreachableError, match=r"a\.db.*Permission denied; change the permissions"):
        opened(hidden.path)


def test_only_what_is_certainly_not_there_is_gone(hidden: Hidden) -> None:
    hidden.path.touch()
    assert file_at(hidden.path) is not None
    assert file_at(hidden.path.with_name("none")) is None
    assert file_at(hidden.path / "below a file") is None
    hidden.hide()
    with pytest.raises(CommitError):
        file_at(hidden.path)


@pytest.mark.parametrize("number", [errno.EIO, errno.ESTALE, errno.ENOTCONN])
def test_a_disk_that_does_not_answer_is_told_as_one_with_what_to_do(number: int) -> None:
    error = cannot_look(Path("/a.db"), OSError(number, os.strerror(number)))
    assert error.trouble is Trouble.DISK
    assert "see the message" not in str(error)
