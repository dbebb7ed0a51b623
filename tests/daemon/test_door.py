"""A revocation sends listeners away without holding the daemon up, and says so where the port does not come back."""

from __future__ import annotations

from pathlib import Path

from driftwatch.bus.keys import KeyFolder, Role
from driftwatch.bus.publisher import Publisher
from driftwatch.daemon.door import Door


def test_a_port_that_stays_taken_after_a_revocation_is_told_once_until_it_is_had_again(tmp_path: Path) -> None:
    keys, lines = KeyFolder(tmp_path), list[str]()
    keys.ensure("ann")
    keys.grant("one", Role.LOOK, 0, (None, None), tmp_path / "one.key")
    with Door(tmp_path, lambda text, _fault: lines.append(text)) as door:
        with door.publisher("tcp://0.0.0.0:*") as publisher:
            for _ in range(2):
                door.chore()
            assert lines == []
            with Publisher("tcp://127.0.0.1:*") as other:
                publisher.endpoint = other.endpoint  # as if that one had come in between
                keys.revoke("one")
                for _ in range(5):
                    publisher.serve()
                    door.chore()
                assert len([line for line in lines if line.startswith("Nothing is published until")]) == 1
            while publisher.trouble is not None:
                publisher.serve()
            door.chore()
        assert len(lines) == 2  # and who is let in no longer
