"""Commands: parse, call one function below, print."""

from __future__ import annotations

import typer

app = typer.Typer(no_args_is_help=True, add_completion=False)


def main() -> None:
    """Run the command line."""
    app()
