"""Keys lie in files that only their owner may read, and each has one name and one role."""

from __future__ import annotations

import json
import os
import stat
import threading
from pathlib import Path

import pytest
from driftwatch.bus.errors import KeysError, NoKeyError
from driftwatch.bus.keys import ClientKey, KeyFolder, Role
from driftwatch.records import NS

AT_NS = 1_767_225_600 * NS
WHERE = ("tcp://127.0.0.1:5572", "tcp://127.0.0.1:5571")


@pytest.fixture
def folder(tmp_path: Path) -> KeyFolder:
    keys = KeyFolder(tmp_path)
    keys.ensure("ann")
    return keys


def modes(folder: Path) -> dict[str, int]:
    return {path.name: stat.S_IMODE(path.stat().st_mode) for path in (folder, *folder.iterdir())}


def test_the_first_start_makes_the_daemons_pair_and_its_users_key_for_their_owner_alone(folder: KeyFolder) -> None:
    assert modes(folder.path) == {"keys": 0o700, "daemon.json": 0o600, "operator.json": 0o600}
    operator = folder.operator()
    assert (operator.name, operator.role, operator.daemon) == ("ann", Role.OPERATE, folder.daemon().public)
    assert operator.public != folder.daemon().public
    assert folder.granted() == ()


def test_later_starts_change_no_key(folder: KeyFolder) -> None:
    before = folder.daemon(), folder.operator()
    again = KeyFolder(folder.path.parent)
    again.ensure("somebody else")
    assert (again.daemon(), again.operator()) == before
    again.discard()  # it made none, so it takes none away
    assert (folder.daemon(), folder.operator()) == before


def test_a_start_of_which_nothing_comes_leaves_no_keys_behind(tmp_path: Path) -> None:
    keys = KeyFolder(tmp_path)
    keys.ensure("ann")
    keys.discard()
    assert list(tmp_path.iterdir()) == []


def test_a_start_of_which_nothing_comes_leaves_the_keys_where_one_was_granted_meanwhile(
    folder: KeyFolder, tmp_path: Path
) -> None:
    """What was handed to somebody names the daemon's public half: new keys would make it worthless."""
    key = KeyFolder(tmp_path).grant("Night shift", Role.LOOK, AT_NS, WHERE, tmp_path / "night.key")
    folder.discard()
    assert folder.daemon().public == key.daemon
    assert folder.operator().daemon == key.daemon
    assert [one.public for one in folder.granted()] == [key.public]


def test_a_change_is_on_the_disk_with_its_name(
    folder: KeyFolder, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Written alone, a list without a revoked key could be the old one again after a power cut."""
    folder.grant("x", Role.LOOK, AT_NS, WHERE, tmp_path / "x.key")
    steps, fsync = [], os.fsync

    def noted(descriptor: int) -> None:
        found = os.fstat(descriptor)
        steps.append((stat.S_ISDIR(found.st_mode), found.st_ino, folder.granted_path.stat().st_ino))
        fsync(descriptor)

    monkeypatch.setattr(os, "fsync", noted)
    folder.revoke("x")
    (of_file, draft, before), (of_folder, synced, after) = steps
    assert (of_file, of_folder, synced) == (False, True, folder.path.stat().st_ino)
    assert draft == after != before


def test_a_granted_key_stands_in_its_file_whole_and_in_the_list_by_its_public_half(
    folder: KeyFolder, tmp_path: Path
) -> None:
    key = folder.grant("Night shift", Role.LOOK, AT_NS, WHERE, tmp_path / "night.key")
    assert ClientKey.read(tmp_path / "night.key") == key
    assert stat.S_IMODE((tmp_path / "night.key").stat().st_mode) == 0o600
    (granted,) = folder.granted()
    assert (granted.name, granted.role, granted.public, granted.granted_ns) == (
        "Night shift",
        "look",
        key.public,
        AT_NS,
    )
    assert (key.control, key.publish, key.daemon) == (*WHERE, folder.daemon().public)
    assert key.secret not in folder.granted_path.read_text()
    assert set(modes(folder.path).values()) == {0o700, 0o600}


def test_no_secret_is_in_what_a_log_would_show(folder: KeyFolder) -> None:
    assert folder.daemon().secret not in repr(folder.daemon())
    assert folder.operator().secret not in f"{folder.operator()!r} {folder.operator()}"


@pytest.mark.parametrize("name", ["night SHIFT", "Ann", " x", "", "a/b", "x" * 65, "new\nline", "../up"])
def test_a_name_that_is_taken_or_none_is_refused_and_leaves_no_file(
    folder: KeyFolder, tmp_path: Path, name: str
) -> None:
    folder.grant("Night shift", Role.LOOK, AT_NS, WHERE, tmp_path / "night.key")
    before = folder.granted()
    with pytest.raises(KeysError, match=r"expected (a name of its own|1 to 64 letters)"):
        folder.grant(name, Role.OPERATE, AT_NS, WHERE, tmp_path / "other.key")
    assert folder.granted() == before
    assert not (tmp_path / "other.key").exists()


def test_no_file_is_written_over_and_then_nothing_is_granted(folder: KeyFolder, tmp_path: Path) -> None:
    (tmp_path / "there.key").write_text("mine")
    with pytest.raises(KeysError, match="is there already"):
        folder.grant("x", Role.LOOK, AT_NS, WHERE, tmp_path / "there.key")
    assert (tmp_path / "there.key").read_text() == "mine"
    assert folder.granted() == ()
    assert len(list(tmp_path.iterdir())) == 2  # no draft is left


def test_a_revoked_key_is_gone_and_its_name_free_again(folder: KeyFolder, tmp_path: Path) -> None:
    for name in ("one", "two"):
        folder.grant(name, Role.LOOK, AT_NS, WHERE, tmp_path / name)
    assert folder.revoke("ONE").name == "one"
    assert [one.name for one in folder.granted()] == ["two"]
    with pytest.raises(KeysError, match="expected one of: two"):
        folder.revoke("one")
    folder.grant("one", Role.LOOK, AT_NS, WHERE, tmp_path / "again")
    assert [one.name for one in folder.granted()] == ["two", "one"]


def test_the_daemons_user_cannot_be_revoked(folder: KeyFolder) -> None:
    with pytest.raises(KeysError, match="no granted key is called 'ann'"):
        folder.revoke("ann")


@pytest.mark.parametrize("mode", [0o640, 0o604, 0o620, 0o601, 0o644])
def test_a_file_that_is_open_to_others_is_refused_with_the_remedy(folder: KeyFolder, mode: int) -> None:
    folder.operator_path.chmod(mode)
    with pytest.raises(KeysError, match=rf"has mode 0{mode:o}, open to others; expected 0600.*chmod 600"):
        folder.operator()


def test_nothing_is_granted_from_a_folder_that_is_open_to_others(folder: KeyFolder, tmp_path: Path) -> None:
    folder.path.chmod(0o750)
    with pytest.raises(KeysError, match="has mode 0750, open to others; expected 0700"):
        folder.grant("x", Role.LOOK, AT_NS, WHERE, tmp_path / "x.key")
    assert not (tmp_path / "x.key").exists()


def test_a_key_that_is_not_there_names_where_it_was_looked_for_and_the_remedy(tmp_path: Path) -> None:
    with pytest.raises(NoKeyError, match=r"nowhere\.key.*expected a key; have one made with `driftwatch keys grant"):
        ClientKey.read(tmp_path / "nowhere.key")


@pytest.mark.parametrize(
    "change",
    [
        {"schema": 2},
        {"role": "rule"},
        {"role": None},
        {"public": "short"},
        {"secret": 5},
        {"daemon": "\u00e9" * 40},
        {"secret": "a" * 39 + "~"},  # no Z85: 40 characters that stand for no bytes
        {"public": "#" * 40},  # its characters, but more than four bytes hold
        {"control": 5},
        {"name": ["x"]},
    ],
    ids=str,
)
def test_a_file_that_holds_no_key_is_refused(folder: KeyFolder, change: dict[str, object]) -> None:
    document = json.loads(folder.operator_path.read_text()) | change
    folder.operator_path.write_text(json.dumps(document))
    with pytest.raises(KeysError, match="holds no keys"):
        folder.operator()


@pytest.mark.parametrize(
    "text", ["", "{", "[]", "[" * 10_000, "null", '{"schema": 1}', '{"schema": 1, "granted": [5]}']
)
def test_a_list_that_holds_no_keys_is_refused(folder: KeyFolder, text: str) -> None:
    folder.granted_path.write_text(text)
    folder.granted_path.chmod(0o600)
    with pytest.raises(KeysError, match="holds no keys"):
        folder.granted()


def test_grants_at_the_same_time_are_all_kept(folder: KeyFolder, tmp_path: Path) -> None:
    """Each of the changes reads the list and writes it: whoever did so unlocked would lose others'."""
    names = [f"key {number}" for number in range(16)]

    def grant(name: str) -> None:
        KeyFolder(tmp_path).grant(name, Role.LOOK, AT_NS, WHERE, tmp_path / f"{name}.key")

    threads = [threading.Thread(target=grant, args=(name,)) for name in names]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(one.name for one in folder.granted()) == sorted(names)
    assert len({one.public for one in folder.granted()}) == len(names)


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can give a folder away")
def test_a_folder_that_somebody_else_put_there_is_refused(tmp_path: Path) -> None:
    """In a state folder where others may write one could be made before the first start, to read the keys."""
    (tmp_path / "keys").mkdir(0o700)
    os.chown(tmp_path / "keys", 12_345, 12_345)
    with pytest.raises(KeysError, match="belongs to user 12345; expected the user who runs the daemon"):
        KeyFolder(tmp_path).ensure("ann")
    assert list((tmp_path / "keys").iterdir()) == []


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can act for another user")
def test_what_root_grants_is_the_daemons_users(tmp_path: Path) -> None:
    state = tmp_path / "state"
    state.mkdir(0o700)
    os.chown(state, 12_345, 12_345)
    keys = KeyFolder(state)
    keys.ensure("ann")
    keys.grant("x", Role.LOOK, AT_NS, WHERE, tmp_path / "x.key")
    assert {path.stat().st_uid for path in (keys.path, *keys.path.iterdir())} == {12_345}
    assert (tmp_path / "x.key").stat().st_uid == tmp_path.stat().st_uid
