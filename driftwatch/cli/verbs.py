"""A command that looks into the store and has verbs that act: without a verb it looks."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from collections.abc import Sequence

LOOK = "list"
"""The verb that is meant where none is given."""


class LookingGroup(click.Group):
    """A group whose first word may be left out: it is `LOOK` then."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        """Put the verb in where it was left out."""
        return super().parse_args(ctx, _with_verb(args, [*self.commands, *ctx.help_option_names]))


def _with_verb(args: Sequence[str], known: Sequence[str]) -> list[str]:
    first = args[0] if args else None
    return list(args) if first in known or not (first is None or first.startswith("-")) else [LOOK, *args]
