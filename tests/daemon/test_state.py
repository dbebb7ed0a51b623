"""One daemon to a state folder, in real processes: the second is told who is first, and no death leaves it locked."""

from __future__ import annotations

import os
import signal
import stat
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from driftwatch.daemon.state import FOLDER_MODE, LOCK_NAME, StateBusyError, StateLock, StateUnreachableError

HOLDING = """
import subprocess, sys
from pathlib import Path
from driftwatch.daemon.state import StateLock
with StateLock(Path(sys.argv[1]), "press line"):
    child = subprocess.Popen(["sleep", "600"], close_fds=False) if "--child" in sys.argv else None
    print(child.pid if child else "held", flush=True)
    sys.stdin.read()
"""

ONE_TRY = """
import sys
from pathlib import Path
from driftwatch.daemon.state import StateBusyError, StateLock
sys.stdin.read(1)
try:
    lock = StateLock(Path(sys.argv[1]), "one of many")
except StateBusyError:
    print("busy", flush=True)
else:
    print("held", flush=True)
    sys.stdin.read()
"""


@contextmanager
def started(program: str, folder: Path, *arguments: str) -> Iterator[subprocess.Popen[str]]:
    command = [sys.executable, "-c", program, str(folder), *arguments]
    process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    try:
        yield process
    finally:
        process.kill()
        process.communicate(timeout=60)


def line_of(process: subprocess.Popen[str]) -> str:
    assert process.stdout is not None
    return process.stdout.readline().strip()


def test_the_second_daemon_is_told_who_is_first_and_what_to_do(tmp_path: Path) -> None:
    with started(HOLDING, tmp_path) as first:
        assert line_of(first) == "held"
        with pytest.raises(StateBusyError) as caught:
            StateLock(tmp_path, "another")
        said = str(caught.value)
        assert said.startswith(f"{tmp_path}: process {first.pid} (station 'press line') runs on this state folder")
        assert said.endswith("stop that process, or name another folder with [daemon] state")
        assert (tmp_path / LOCK_NAME).read_text() == f"{first.pid} press line\n", "the refused one changed nothing"


def test_a_holder_killed_outright_frees_the_folder(tmp_path: Path) -> None:
    with started(HOLDING, tmp_path) as first:
        assert line_of(first) == "held"
        os.kill(first.pid, signal.SIGKILL)
        first.wait(timeout=60)
        with StateLock(tmp_path, "the next"):
            assert (tmp_path / LOCK_NAME).read_text() == f"{os.getpid()} the next\n"


def test_a_child_that_outlives_the_killed_holder_keeps_nobody_out(tmp_path: Path) -> None:
    """The daemon's own children may live on for a moment; the service manager starts the next daemon at once."""
    with started(HOLDING, tmp_path, "--child") as first:
        child = int(line_of(first))
        try:
            os.kill(first.pid, signal.SIGKILL)
            first.wait(timeout=60)
            os.kill(child, 0)  # it lives
            StateLock(tmp_path, "the next").release()
        finally:
            os.kill(child, signal.SIGKILL)


def test_of_many_that_start_at_once_exactly_one_gets_the_folder(tmp_path: Path) -> None:
    folder = tmp_path / "state"
    with (
        started(ONE_TRY, folder) as one,
        started(ONE_TRY, folder) as two,
        started(ONE_TRY, folder) as three,
        started(ONE_TRY, folder) as four,
    ):
        every = (one, two, three, four)
        for process in every:
            assert process.stdin is not None
            process.stdin.write("go")
            process.stdin.flush()
        assert sorted(map(line_of, every)) == ["busy", "busy", "busy", "held"]


def test_it_is_free_after_release_and_taken_while_held_in_this_process_too(tmp_path: Path) -> None:
    with StateLock(tmp_path, "a"), pytest.raises(StateBusyError, match=rf"process {os.getpid()} \(station 'a'\)"):
        StateLock(tmp_path, "b")
    StateLock(tmp_path, "b").release()


def test_a_missing_folder_is_made_for_its_owner_alone(tmp_path: Path) -> None:
    with StateLock(tmp_path / "state", "a"):
        assert stat.S_IMODE((tmp_path / "state").stat().st_mode) == FOLDER_MODE


def test_the_mode_of_a_folder_that_is_there_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "state").mkdir(0o755)
    before = (tmp_path / "state").stat().st_mode
    StateLock(tmp_path / "state", "a").release()
    assert (tmp_path / "state").stat().st_mode == before


@pytest.mark.parametrize("path", ["no/such/state", "file", "file/state"])
def test_a_folder_that_cannot_be_is_one_error_with_what_to_do(tmp_path: Path, path: str) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(StateUnreachableError) as caught:
        StateLock(tmp_path / path, "a")
    assert str(caught.value).startswith(f"{tmp_path / path}: got ")
    assert "[daemon] state" in str(caught.value)
    assert not (tmp_path / "no").exists()


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_a_folder_that_may_not_be_written_to_is_said(tmp_path: Path) -> None:
    tmp_path.chmod(0o500)
    with pytest.raises(StateUnreachableError, match="Permission denied"):
        StateLock(tmp_path, "a")
