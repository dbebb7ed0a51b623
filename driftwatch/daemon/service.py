"""Everything that a live run needs, opened in the right order and closed in the reverse one."""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Self, TypeVar

from driftwatch.config import ConfigError, Configuration, SoundcardSourceConfig, is_simulated, load, unserved
from driftwatch.daemon.door import Door
from driftwatch.daemon.feed import CardFeed, PacedFeed
from driftwatch.daemon.keeper import Keeper
from driftwatch.daemon.live import Company, LiveRun, Observer
from driftwatch.daemon.notify import ServiceManager
from driftwatch.daemon.pruner import Pruner
from driftwatch.daemon.reload import reload_plan
from driftwatch.daemon.state import StateLock, recordings_folder, state_folder
from driftwatch.pipeline.commands import DONE
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.records import Action, Command, Envelope, Heartbeat, Origin
from driftwatch.store.errors import CommitError, Trouble, unreachable
from driftwatch.store.location import database_path
from driftwatch.store.lock import HolderLock, WriterLock
from driftwatch.store.opening import is_folder, is_there, refuse_foreign, refuse_read_only
from driftwatch.store.writer import Writer

if TYPE_CHECKING:
    from driftwatch.daemon.feed import Feed
    from driftwatch.daemon.stop import Stop
    from driftwatch.stream.source import Source

_Lock = TypeVar("_Lock", bound=HolderLock)


@dataclass(frozen=True, slots=True)
class Outlets:
    """Where a run tells of itself."""

    show: Callable[[Sequence[Envelope]], None]  # every group of records, once it is stored and published
    told: Callable[[str, bool], None]  # a line worth a log, and whether it is of a fault
    beat: Callable[[Heartbeat], None] = lambda _: None
    opened: Callable[[Path, str], None] = lambda _path, _endpoint: None  # the database and the endpoint
    level: Callable[[str], None] = lambda _: None  # how much is to be logged, when that changes
    observer: Observer | None = None


def feed_of(config: Configuration, source: Source | None, pace: float) -> Feed:
    """Return how the only source of a configuration is read; `source` where it is no sound card."""
    (chosen,) = config.source  # more are refused as not served
    queue_s = config.daemon.queue_s
    if isinstance(chosen, SoundcardSourceConfig):
        return CardFeed(chosen, max(channel.input for channel in config.channel), queue_s)
    if source is None:
        raise ValueError(f"a source of kind {chosen.kind} must be opened before")
    return PacedFeed(source, pace, queue_s)


def origin_of(config: Configuration) -> Origin:
    """Return where the samples of a configuration come from."""
    if is_simulated(config):
        return Origin.SIMULATED
    return Origin.LIVE if isinstance(config.source[0], SoundcardSourceConfig) else Origin.REPLAY


class Service:
    """A live run with all that it needs.

    Parameters
    ----------
    config
        The configuration; it has one source.
    feed
        How that is read.
    outlets
        Where it tells of itself.
    store, publish
        Database and endpoint; None: the configuration's.
    """

    def __init__(
        self,
        config: Configuration,
        feed: Feed,
        outlets: Outlets,
        store: str | None = None,
        publish: str | None = None,
    ) -> None:
        self._config = config
        self._feed = feed
        self._outlets = outlets
        self._store = store
        self._publish = publish
        self._run = str(uuid.uuid4())
        self._opened = ExitStack()
        self._hangup: Stop | None = None
        self._is_open = False

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._opened.close()

    def open(self, stop: Stop) -> bool:
        """Open everything: ports and locks, then the source, the database last; return False if `stop` came first.

        Raises
        ------
        StateError, BusError, SourceRefusedError, StoreError
            When something cannot be had; nothing was stored then.
        """
        config, outlets, enter = self._config, self._outlets, self._opened.enter_context
        station = config.station.name
        self._door = enter(Door(state_folder(config, self._store), outlets.told))
        publisher = enter(self._door.publisher(self._publish or config.bus.publish))
        self._manager = enter(ServiceManager())
        for warning in self._manager.warnings:
            outlets.told(warning, True)
        if self._store is None:
            enter(_folder_of(config.store.url))
        url = self._store or config.store.url
        path = database_path(url, Path.cwd())
        refuse_foreign(path)
        refuse_read_only(path)
        lock = self._locked(WriterLock(path, station))
        folder, recordings = state_folder(config, self._store), recordings_folder(config, self._store)
        self._locked(StateLock(folder, station))
        if config.record.keep_hours > 0 and recordings != folder:
            self._locked(StateLock(recordings, station))  # another state folder may have the same one for these
        self._opened.callback(self._door.shut)  # while the folder is still ours
        self._door.open(config.bus.control, publisher.endpoint)
        company = Company(
            publisher, self._chore, outlets.told, self._beat, self._ending, outlets.observer, asked=self._obey
        )
        self._live = enter(LiveRun(config, self._run, self._feed, company, recordings))
        source = self._live.start(stop)
        if source is None:
            return False
        writer = enter(Writer.open_live(path, lock))
        self._is_open = True
        outlets.opened(writer.path, publisher.endpoint)
        header = RunHeader(station, self._run, origin_of(config), source.time_quality)
        self._station = Station(config, header, [source])
        self._keeper = Keeper(writer, publisher, self._shown, is_patient=True)
        self._pruner = Pruner(writer, config.store.keep_days, time.time_ns)
        self._door.serve(writer.path)
        return True

    def _locked(self, lock: _Lock) -> _Lock:
        """See to it that a lock ends with this, and leaves no file if nothing came of it."""
        self._opened.callback(lambda: lock.release() if self._is_open else lock.discard())
        return lock

    def until(self, stop: Stop, hangup: Stop) -> str:
        """Run to the end and return why it ended; `hangup` asks for a reload of the configuration.

        Raises
        ------
        SourceFailedError, CommitError
            As `LiveRun.until`.
        """
        self._stop, self._hangup = stop, hangup
        self._is_ready = False
        return self._live.until(stop, self._station, self._keeper)

    # ------------------------------------------------------------------------------------------ once a second

    def _chore(self, now: float) -> None:
        self._prune(now)
        self._notify(now)
        self._door.chore()
        if self._hangup is not None and self._hangup.is_set():
            self._hangup.clear()
            self._reload(Command(self._station.now_ns, str(uuid.uuid4()), "signal", Action.RELOAD, None, None))

    def _prune(self, now: float) -> None:
        """Take a step of pruning, where the store is well; damage that it finds is the keeper's to deal with."""
        if self._keeper.trouble is not None:
            return
        try:
            self._pruner.step(now)
        except CommitError as error:
            if error.trouble is Trouble.DAMAGED:
                self._keeper.failed(error, now)
            elif error.trouble is Trouble.REFUSED:  # a fault of pruning: nothing of the run needs it
                self._outlets.told(f"What is old was not removed from the store: {error}", True)

    def _notify(self, now: float) -> None:
        live, manager = self._live, self._manager
        status = self._status()
        if not self._is_ready and (live.samples > 0 or live.is_silent):
            self._is_ready = True
            manager.ready(status)
        manager.status(status)
        manager.alive(now, live.samples)
        if live.is_silent:
            manager.waiting(now, live.attempts)

    def _status(self) -> str:
        if self._live.is_silent:
            return f"Waiting for the samples of {self._feed.name}"
        if (trouble := self._keeper.trouble) is not None:
            unsaved, seconds = self._keeper.unsaved(time.monotonic())
            return f"Measuring; the store takes no rows ({trouble}): {unsaved} records wait since {seconds:.0f} s"
        worst = self._station.worst_alert
        return f"Measuring; {f'an alert of {worst} priority stands' if worst else 'no alert stands'}"

    # ------------------------------------------------------------------------------------------ the door

    def _obey(self) -> None:
        self._door.desk.carry_out(lambda: self._station.now_ns, self._do)

    def _do(self, command: Command) -> Sequence[Envelope]:
        """Do what a command asks for and keep its records; return them."""
        if command.action == Action.RELOAD:
            return self._reload(command)
        if command.action == Action.STOP:
            self._stop.set()
            self._outlets.told(f"{command.by} stops the daemon: {command.reason or 'no reason given'}", False)
            command = replace(command, outcome=DONE)
        return self._fed(command)

    def _fed(self, command: Command) -> Sequence[Envelope]:
        envelopes = self._station.feed(command)
        self._keeper.take(envelopes)
        return envelopes

    def _shown(self, group: Sequence[Envelope]) -> None:
        self._door.desk.stored(group)
        self._outlets.show(group)

    def _beat(self, heartbeat: Heartbeat) -> None:
        self._door.stands(heartbeat, self._station.standing)
        self._outlets.beat(heartbeat)

    def _ending(self) -> None:
        self._door.desk.end()
        self._manager.stopping()

    # ------------------------------------------------------------------------------------------ reload

    def _reload(self, command: Command) -> Sequence[Envelope]:
        """Take over a changed configuration, or tell why that needs a restart; return the record of it."""
        self._manager.reloading()
        path = self._config.path
        place = _legible(str(path))
        try:
            new = load(path) if path is not None else self._config
            problems = [*map(str, unserved(new)), *reload_plan(self._config, new)]
        except ConfigError as error:
            problems = [str(problem) for problem in error.problems]
            new = self._config
        if problems:
            self._outlets.told("The configuration was not reloaded: " + "; ".join(problems), True)
            outcome = "refused: " + "; ".join(problems)
        else:
            self._take_over(new)
            self._outlets.told(f"The configuration was reloaded from {place}", False)
            outcome = f"{DONE}: taken over, sha256 {new.sha256}"
        self._manager.ready(self._status())
        return self._fed(replace(command, target=place, outcome=outcome))

    def _take_over(self, new: Configuration) -> None:
        self._keeper.take(self._station.reload(new))
        self._pruner.keep_days = new.store.keep_days
        if new.daemon.log_level != self._config.daemon.log_level:
            self._outlets.level(new.daemon.log_level)
        self._config = new


def _legible(text: str) -> str:
    """Return a text that can be stored: a file's name may hold bytes that are none of UTF-8."""
    return text.encode("utf-8", "surrogateescape").decode("utf-8", "replace")


@contextmanager
def _folder_of(url: str) -> Iterator[None]:
    """Make the folder of the configuration's own store; take it away again if nothing came into it.

    Raises
    ------
    StoreUnreachableError
        When it cannot be made.
    """
    path = Path(url.removeprefix("sqlite:///"))
    folder = path.parent
    missing = not is_there(folder) and is_folder(folder.parent)
    if missing:
        try:
            folder.mkdir()
        except OSError as error:
            raise unreachable(path, error) from None
    try:
        yield
    finally:
        if missing and not any(folder.iterdir()):
            folder.rmdir()
