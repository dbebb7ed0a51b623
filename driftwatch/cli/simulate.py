"""``driftwatch simulate``: a recording of resonators with known truth."""

from __future__ import annotations

import json
import signal
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.progress import progress
from driftwatch.cli.shared import refuse, work_failed

if TYPE_CHECKING:
    from pydantic import ValidationError

    from driftwatch.config import SimulatedSourceConfig
    from driftwatch.stream.simulated import SimulatedSource
    from driftwatch.stream.writing import Written

DEFAULT_SECONDS = 60.0
DEFAULT_LEVEL = 0.1
"""rms of a mode's response where none is given; full scale is 1."""

DESCRIBING = ("rate", "seed", "modes", "tones", "noise", "impact_every", "impact_peak", "quantity")
"""What --config says already."""

_OPTION_OF = {
    "frequency_hz": "FREQ",
    "q": "Q",
    "level": "LEVEL",
    "rate_hz": "--rate",
    "impact_every_s": "--impact-every",
    "resonator": "--mode",
}


def _numbers(
    _context: click.Context, parameter: click.Parameter, values: tuple[str, ...]
) -> tuple[tuple[float, ...], ...]:
    """Read numbers with commas between them; the form says how many, the bracketed ones may be left out."""
    form = str(parameter.metavar)
    least, most = form.split("[")[0].count(",") + 1, form.count(",") + 1
    read = []
    for value in values:
        try:
            numbers = tuple(float(part) for part in value.split(","))
        except ValueError:
            numbers = ()
        if not least <= len(numbers) <= most:
            raise click.BadParameter(f"{value!r} is not {form}; write numbers with commas between, such as 900,40")
        read.append(numbers)
    return tuple(read)


@click.command("simulate", short_help="Make a recording of resonators with known truth.")
@click.argument("out", metavar="OUT.wav", type=click.Path(path_type=Path))
@click.option(
    "--mode",
    "modes",
    metavar="FREQ,Q[,LEVEL]",
    callback=_numbers,
    multiple=True,
    help="A resonance under random force: Hz, Q, rms (0.1). Repeatable.",
)
@click.option(
    "--tone", "tones", metavar="FREQ,LEVEL", callback=_numbers, multiple=True, help="A sine: Hz, rms. Repeatable."
)
@click.option("--noise", type=float, default=0.001, show_default=True, help="rms of white noise; full scale is 1.")
@click.option("--impact-every", type=float, metavar="S", help="Strike every mode each so many seconds.")
@click.option("--impact-peak", type=float, default=0.5, show_default=True, help="Amplitude each decay begins with.")
@click.option(
    "--quantity",
    type=click.Choice(["acceleration", "velocity", "displacement"]),
    default="acceleration",
    show_default=True,
    help="What is sensed.",
)
@click.option("--seconds", type=float, metavar="S", help="Length; left out: the configuration's, or 60.")
@click.option("--rate", type=int, default=48_000, show_default=True, metavar="HZ", help="Sample rate.")
@click.option("--seed", type=int, default=0, show_default=True, help="The same seed gives the same samples.")
@click.option("--config", "config", type=click.Path(path_type=Path), help="Record what its simulated source gives.")
@click.option(
    "--subtype",
    type=click.Choice(["float", "pcm24", "pcm16"]),
    default="float",
    show_default=True,
    help="How samples are written; float keeps them bit for bit.",
)
@click.option("--force", is_flag=True, help="Replace what is there.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object that says what was written.")
@click.pass_context
def command(
    context: click.Context, /, out: Path, config: Path | None, subtype: str, force: bool, as_json: bool, **told: Any
) -> None:
    """Make a recording of resonators with known truth, and write the truth beside it as OUT.truth.json.

    With --config the samples are those that `run` would get from the configuration's simulated source, so that a
    replay of the recording equals the run.

    \b
    Example: driftwatch simulate ring.wav --mode 900,40 --mode 2400,150,0.05 --seconds 20
    Example: driftwatch simulate struck.wav --mode 900,400,0 --impact-every 2 --impact-peak 0.8
    Example: driftwatch simulate demo.wav --config config/demo.toml --seconds 60
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    _refuse_target(out, force)
    described = _from_options(told) if config is None else _from_file(config, context)
    source = _source(described, told["seconds"])
    written = _write(source, out, subtype)
    summary = {
        "recording": str(out),
        "truth": str(_truth_path(out)),
        "container": written.container,
        "subtype": subtype,
        "rate_hz": source.rate_hz,
        "inputs": source.inputs,
        "samples": written.samples,
        "seconds": written.samples / source.rate_hz,
        "seed": source.config.seed,
        "clipped": written.clipped,
    }
    _tell(summary, as_json)


# ---------------------------------------------------------------------------------------------- what to record


def _truth_path(out: Path) -> Path:
    return out.with_suffix(".truth.json")


def _refuse_target(out: Path, force: bool) -> None:
    """Leave when the recording or its truth cannot be put there."""
    problems = []
    if out.suffix.lower() != ".wav":
        problems.append(f"{out}: no name of a WAV file; expected one that ends in .wav; write {out}.wav")
    if not out.parent.is_dir():
        problems.append(f"{out}: no folder {out.parent}; expected one that exists; make it first")
    for path in (out, _truth_path(out)):
        if path.is_dir():
            problems.append(f"{path}: a directory; expected the name of a new file; choose another name")
        elif path.exists() and not force:
            problems.append(f"{path}: exists; expected a new name; choose another or use --force to replace it")
    if problems:
        refuse(problems)


def _from_options(told: dict[str, Any]) -> SimulatedSourceConfig:
    """Return the source that the options describe."""
    from pydantic import ValidationError

    from driftwatch.config import SimulatedSourceConfig

    if not told["modes"] and not told["tones"]:
        raise click.UsageError("nothing to record; expected --mode FREQ,Q, --tone FREQ,LEVEL or --config CONFIG")
    try:
        return SimulatedSourceConfig.model_validate(
            {
                "name": "simulated",
                "rate_hz": told["rate"],
                "seed": told["seed"],
                "noise": told["noise"],
                "resonator": [_resonator(mode, told) for mode in told["modes"]],
                "tone": [{"frequency_hz": frequency, "level": level} for frequency, level in told["tones"]],
            }
        )
    except ValidationError as error:
        refuse(_problems(error))


def _resonator(mode: tuple[float, ...], told: dict[str, Any]) -> dict[str, Any]:
    impacts = {}
    if told["impact_every"] is not None:
        impacts = {"impact_every_s": told["impact_every"], "impact_peak": told["impact_peak"]}
    level = mode[2] if len(mode) == 3 else DEFAULT_LEVEL
    return {"frequency_hz": mode[0], "q": mode[1], "level": level, "quantity": told["quantity"], **impacts}


def _problems(error: ValidationError) -> list[str]:
    """Return what the model refuses in the words of the options."""
    problems = []
    for found in error.errors(include_url=False):
        if found["type"] == "default_factory_not_called":  # only says that another error stands
            continue
        words = [_option(part) for part in found["loc"] if part != "source"]
        message = found["msg"][:1].lower() + found["msg"][1:]
        problems.append(f"{' '.join(words)}: got {found['input']}; {message}")
    return problems


def _option(part: str | int) -> str:
    if isinstance(part, int):
        return f"number {part + 1}"
    return _OPTION_OF.get(part, f"--{part.replace('_', '-')}")


def _from_file(path: Path, context: click.Context) -> SimulatedSourceConfig:
    """Return the one simulated source of a configuration."""
    from driftwatch.config import ConfigError, SimulatedSourceConfig, load

    given = [
        name for name in DESCRIBING if context.get_parameter_source(name) is click.core.ParameterSource.COMMANDLINE
    ]
    if given:
        options = ", ".join(f"--{name.removesuffix('s').replace('_', '-')}" for name in given)
        raise click.UsageError(f"{options} beside --config; the configuration says it all; leave one of the two out")
    try:
        config = load(path)
    except ConfigError as error:
        refuse(error.problems)
    found = [source for source in config.source if isinstance(source, SimulatedSourceConfig)]
    if len(found) != 1:
        refuse([f"{path}: {len(found)} simulated sources; expected one; a recording holds the samples of one"])
    return found[0]


def _source(described: SimulatedSourceConfig, seconds: float | None) -> SimulatedSource:
    from driftwatch.stream.simulated import SimulatedSource

    length = seconds if seconds is not None else described.seconds or DEFAULT_SECONDS
    if not 1 / described.rate_hz <= length < 1e9:  # written so that NaN fails too
        refuse([f"--seconds: got {length:g}; expected a sample's length or more, under 1e9; give a length in seconds"])
    return SimulatedSource(described.model_copy(update={"seconds": length}), 0)


# ---------------------------------------------------------------------------------------------- writing and telling


def _write(source: SimulatedSource, out: Path, subtype: str) -> Written:
    """Write the recording and its truth; both or none."""
    from driftwatch.stream.simulated import truth_of
    from driftwatch.stream.writing import whole, write_recording

    with _terminable(), work_failed(), whole(_truth_path(out)) as unfinished:
        truth = {"recording": out.name, "subtype": subtype, **truth_of(source)}
        unfinished.write_text(json.dumps(truth, indent=2) + "\n", encoding="utf-8")
        with progress(source.length, source.rate_hz) as advance:
            return write_recording(source, out, subtype, advance)


@contextmanager
def _terminable() -> Iterator[None]:
    """Let SIGTERM unwind like an interrupt, so that nothing half-written stays."""
    before = signal.signal(signal.SIGTERM, lambda number, _: sys.exit(128 + number))
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _tell(summary: dict[str, Any], as_json: bool) -> None:
    if summary["clipped"]:
        words = (
            f"{summary['clipped']} values lay beyond full scale and were cut; lower the levels or use --subtype float"
        )
        click.echo(f"Warning: {words}", err=True)
    if as_json:
        click.echo(json.dumps(summary))
        return
    size = f"{summary['seconds']:g} s, {summary['inputs']} x {summary['rate_hz']} Hz, {summary['subtype']}"
    click.echo(f"{summary['recording']}: {size}, seed {summary['seed']}. The truth is in {summary['truth']}")
