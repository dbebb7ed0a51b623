"""``driftwatch devices``: what sound inputs there are, and which of them hears the sensor."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any, TypeVar

import click

from driftwatch.cli.figures import NONE
from driftwatch.cli.looking import print_lines, print_table, quiet_pipe
from driftwatch.cli.shared import refuse, typed

if TYPE_CHECKING:
    from collections.abc import Callable

    from driftwatch.stream.soundcard import SoundInput

ANSWER_S = 10.0
"""Most seconds for the sound system to answer: it may hang for ever."""

_HEADS = ["device", "inputs", "Hz", "interface", "default"]

_Result = TypeVar("_Result")


@click.command("devices")
@click.argument("device", nargs=-1)
@click.option("--watch", is_flag=True, help="Show what each input hears, until interrupted.")
@click.option("--seconds", type=click.FloatRange(min=0, min_open=True), help="With --watch: for so long only.")
@click.option("--rate", type=click.IntRange(1), metavar="HZ", help="With --watch: sample rate; left out: its own.")
@click.option("--inputs", type=click.IntRange(1, 256), help="With --watch: how many inputs to open, from the first on.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line.")
def command(
    device: tuple[str, ...], watch: bool, seconds: float | None, rate: int | None, inputs: int | None, as_json: bool
) -> None:
    """Print the sound inputs, with the words to put after `device =` in a configuration.

    DEVICE is a name or a part of one; left out: all of them, with --watch the default one. What another program has
    open may not be listed.

    --watch tells the plugs apart: tap the sensor and see whose peak jumps. Levels are in dB below digital full scale
    (a sine that just reaches it has -3.0 dB rms); rms and line are those of the last second, "held" is the largest
    peak of the last 3 s, "clipped" counts samples at full scale, and "line" is the strongest line of the spectrum
    where one stands out.

    Example: driftwatch devices
    """
    if not watch:
        given = {"--seconds": seconds, "--rate": rate, "--inputs": inputs}
        for name in (name for name, value in given.items() if value is not None):
            raise click.UsageError(f"{name} came without --watch; expected both; add --watch or leave it out")
    there = listed()
    chosen = _chosen(there, device, inputs or 1) if device or watch else there
    with quiet_pipe():
        if watch:
            from driftwatch.cli.listening import watch_inputs

            watch_inputs(chosen, rate_hz=rate, inputs=inputs, seconds=seconds, as_json=as_json)
        else:
            _print(chosen, there, as_json)


def listed() -> list[SoundInput]:
    """Return the sound inputs; leave where there are none or they cannot be listed."""
    from driftwatch.stream.sound_inputs import NONE_THERE
    from driftwatch.stream.soundcard import sound_inputs

    there = answered(sound_inputs)
    if not there:
        refuse([NONE_THERE])
    return there


def answered(work: Callable[[], _Result]) -> _Result:
    """Return what the sound system answers; leave with exit status 2 where it refuses or hangs."""
    from driftwatch.stream.soundcard import leave_hung, within, without_stderr
    from driftwatch.stream.source import SourceRefusedError, StreamError

    try:
        with without_stderr():
            return within(ANSWER_S, work)
    except SourceRefusedError as error:
        return refuse(error.problems)
    except StreamError as error:
        return refuse([error])
    except TimeoutError as error:
        click.echo(f"Error: {error}; expected it to; start the sound server again", err=True)
        return leave_hung(2)
    except KeyboardInterrupt:  # the usual way out would wait for what hangs
        return leave_hung(1)


def _chosen(there: list[SoundInput], names: tuple[str, ...], least_inputs: int) -> list[SoundInput]:
    """Return the inputs that are meant, each once; leave with every problem."""
    from driftwatch.stream.soundcard import find_input
    from driftwatch.stream.source import SourceRefusedError, StreamError

    found: list[SoundInput] = []
    problems: list[str] = []
    for name in names or (None,):
        try:
            found.append(find_input(there, name, least_inputs))
        except SourceRefusedError as error:
            problems += error.problems
        except StreamError as error:
            problems.append(str(error))
    if problems:
        refuse(problems)
    return list(dict.fromkeys(found))


def _print(chosen: list[SoundInput], there: list[SoundInput], as_json: bool) -> None:
    from driftwatch.stream.sound_inputs import words_for

    words = {one: words_for(there, one) for one in chosen}
    if as_json:
        print_lines(json.dumps(_object(one, words[one]), ensure_ascii=False).encode() for one in chosen)
        return
    print_table(_HEADS, [_row(one, words[one]) for one in chosen])
    click.echo(
        'A source in a configuration takes the first column: device = "..."; left out, it takes the default one. '
        f"To see which plug is which: {typed('devices', '--watch')}",
        err=True,
    )


def _row(one: SoundInput, words: str | None) -> list[str]:
    name = words if words is not None else f"({one.full_name}: cannot be told from another)"
    return [name, str(one.inputs), f"{one.rate_hz:g}", one.host, "yes" if one.is_default else NONE]


def _object(one: SoundInput, words: str | None) -> dict[str, Any]:
    return {
        "device": words,
        "name": one.name,
        "interface": one.host,
        "inputs": one.inputs,
        "rate_hz": one.rate_hz,
        "default": one.is_default,
    }
