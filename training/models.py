"""`oddbranch models`: list the kept models, add one, use one, go back."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click

from scoring.artefact import read_model
from training.channel_toml import text_table
from training.kept import Kept, KeptModels

_STAYS = "A running service takes it within seconds; the next nightly run publishes anew."


@click.group("models")
@click.option(
    "--folder",
    type=click.Path(file_okay=False, path_type=Path),
    default=Path("models"),
    show_default=True,
    help="Folder of the kept models.",
)
@click.pass_context
def models_command(context: click.Context, folder: Path) -> None:
    """List the kept models and choose the one in use."""
    context.obj = KeptModels(folder)


@models_command.command("list")
@click.pass_obj
def list_command(models: KeptModels) -> None:
    """List the kept models, oldest first; the one in use is marked."""
    kept, current = models.kept(), models.current()
    if not kept:
        click.echo(f"no models in {models.folder}; `oddbranch models add MODEL` keeps one")
        return
    rows = [_row(one, one == current) for one in kept]
    click.echo(text_table(["", "model", "published", "records", "sources", "days"], rows, left=3))


def _row(kept: Kept, in_use: bool) -> list[str]:
    about = kept.about()
    published = kept.published.strftime("%Y-%m-%d %H:%M:%SZ")
    figures = [str(about.get("n_records", "?")), str(about.get("n_sources", "?")), _days(about)]
    return ["in use" if in_use else "", kept.name, published, *figures]


def _days(about: dict[str, Any]) -> str:
    first, last = about.get("first_ns"), about.get("last_ns")
    return f"{(last - first) / 86_400e9:.1f}" if first is not None and last is not None else "?"


@models_command.command("add")
@click.argument("model", type=click.Path(path_type=Path), metavar="MODEL")
@click.pass_obj
def add_command(models: KeptModels, model: Path) -> None:
    """Keep a model directory, as `oddbranch learn` writes it, and use it."""
    found = read_model(model)
    with models.lock():
        kept = models.publish(found, datetime.now(UTC))
    click.echo(f"{kept.name} is kept as {kept.path} and in use")


@models_command.command("use")
@click.argument("name", metavar="NAME")
@click.pass_obj
def use_command(models: KeptModels, name: str) -> None:
    """Use a kept model: the beginning of its hash, or its directory."""
    with models.lock():
        kept = models.use(name)
    click.echo(f"{kept.name} is in use. {_STAYS}")


@models_command.command("back")
@click.pass_obj
def back_command(models: KeptModels) -> None:
    """Use the model published before the one in use."""
    with models.lock():
        kept = models.back()
    click.echo(f"{kept.name} is in use. {_STAYS}")
