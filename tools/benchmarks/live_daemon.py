"""The daemon as ``driftwatch run`` starts it, with somebody beside it who notes when the records of a block are made.

``python -m benchmarks.live_daemon CONFIG NOTES``: until SIGINT; then NOTES holds, for each block of the source, four
integers of 64 bits: when it arrived, when its records were made (`instant_ns`), and the sequences of the first and the
last of them; 0 and -1 where it made nothing known.
"""

from __future__ import annotations

import sys
from array import array
from pathlib import Path

from driftwatch.cli.live_view import chosen_view
from driftwatch.cli.log import Log
from driftwatch.cli.shared import hung_up, stopped_by_signal
from driftwatch.config import load
from driftwatch.daemon.service import Outlets, Service, feed_of
from driftwatch.records import Envelope
from driftwatch.stream.instants import instant_ns


def main(config_path: Path, notes_path: Path) -> None:
    """Run, then write the notes."""
    config = load(config_path)
    notes = array("q")

    def observer(arrived_ns: int, envelopes: list[Envelope]) -> None:
        first, last = (envelopes[0].sequence, envelopes[-1].sequence) if envelopes else (0, -1)
        notes.extend((arrived_ns, instant_ns(), first, last))

    with stopped_by_signal() as stop:
        view = chosen_view([(mode.channel, mode.name) for mode in config.mode], 5.0)
        log = Log(config.daemon.log_level, view)
        outlets = Outlets(view.show, log.told, view.beat, level=log.level, observer=observer)
        with Service(config, feed_of(config, None, 1.0), outlets) as service, hung_up() as hangup:
            if service.open(stop):
                service.until(stop, hangup)
        view.close()
    notes_path.write_bytes(notes.tobytes())


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(sys.argv[2]))
