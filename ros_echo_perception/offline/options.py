"""Options that several commands share, and how commands fail."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

from ..core.errors import EchoPerceptionError

F = TypeVar("F", bound=Callable[..., Any])
REFUSED_EXIT_CODE = 2
NOTHING_EXIT_CODE = 1


class NothingProcessedError(click.ClickException):
    """There was nothing to do."""

    exit_code = NOTHING_EXIT_CODE


class EchoGroup(click.Group):
    """Turns the package's errors into one line on standard error and exit code 2."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command."""
        try:
            return super().invoke(ctx)
        except EchoPerceptionError as error:
            one_line = " ".join(str(error).split())
            click.echo(f"error: {one_line}", err=True)
            ctx.exit(REFUSED_EXIT_CODE)


def need_something(count: int, what: str) -> None:
    """End with exit code 1 when nothing was processed."""
    if count == 0:
        raise NothingProcessedError(f"nothing processed: the input holds no {what}.")


def head_option(multiple: bool) -> Callable[[F], F]:
    """``--head``, once or several times."""
    return click.option(
        "--head",
        "heads" if multiple else "head",
        required=True,
        multiple=multiple,
        type=click.Path(path_type=Path),
        help="Head file (YAML): nominal, or what calibrate wrote."
        + (" May be given several times." if multiple else ""),
    )


def out_option(text: str) -> Callable[[F], F]:
    """``--out``: where the result goes."""
    return click.option(
        "--out", required=True, type=click.Path(path_type=Path, dir_okay=False), help=text
    )


topic_option = click.option(
    "--topic", default="", help="Topic of the raw echoes, for a bag with several."
)
config_option = click.option(
    "--config",
    type=click.Path(path_type=Path),
    help="Settings (YAML): a node's parameter file, or names and values. Default: as shipped.",
)
