"""`oddbranch models`: list the kept models, add one, use one, go back."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click

from scoring.artefact import read_model
from training.changes import (
    BadChange,
    change_line,
    declare,
    load_changes,
    parse_time,
    take_back,
)
from training.channel_toml import text_table
from training.kept import Kept, KeptModels
from training.near import near_words
from training.report.readings import day_text

# The judge's numbers that are listed, by question, with their headings.
JUDGED = {"held-out density": "density", "alerts": "alerts", "run-away": "furthest"}
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
    heading = ["", "model", "published", "history", "days", "records", "sources"]
    click.echo(text_table([*heading, *JUDGED.values()], rows, left=4))
    click.echo(
        "judged: the newest days' surprise against the model then in use, nats a reading; alerts "
        "in them; furthest channel from its neighbours, conditional spreads; - not judged."
    )


def _row(kept: Kept, in_use: bool) -> list[str]:
    about = kept.about()
    published = kept.published.strftime("%Y-%m-%d %H:%M:%SZ")
    figures = [str(about.get("n_records", "?")), str(about.get("n_sources", "?"))]
    judged = about.get("judge")
    numbers = judged if isinstance(judged, dict) else {}
    return [
        "in use" if in_use else "", kept.name, published, *_span(about), *figures,
        *(_number(numbers.get(name)) for name in JUDGED),
    ]  # fmt: skip


def _span(about: dict[str, Any]) -> list[str]:
    first, last = about.get("first_ns"), about.get("last_ns")
    if first is None or last is None:
        return ["?", "?"]
    return [f"{day_text(first)} to {day_text(last)}", f"{(last - first) / 86_400e9:.1f}"]


def _number(value: object) -> str:
    return f"{value:.3g}" if isinstance(value, int | float) else "-"


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


@models_command.command("since")
@click.argument("time", required=False, metavar="[TIME]")
@click.option("--source", default="", metavar="NAME", help="One source.  [default: all]")
@click.option(
    "--new-source", is_flag=True, help="NAME is right, though no kept model knows it yet."
)
@click.option("--reason", default="", metavar="TEXT", help="What was changed.")
@click.option(
    "--take-back", "is_wrong", is_flag=True, help="The change at TIME was none after all."
)
@click.pass_obj
def since_command(
    models: KeptModels,
    time: str | None,
    source: str,
    new_source: bool,
    reason: str,
    is_wrong: bool,
) -> None:
    """Declare a real change of plant: history counts from TIME on. Without TIME: list them.

    TIME is RFC 3339 with its offset, for example 2026-12-01T06:00:00Z. What came before is
    left out of the next nights, and models from before are no measure for what changed.
    """
    if time is None:
        changes = load_changes(models.folder)
        lines = [change_line(change) for change in changes]
        click.echo("\n".join(lines) if lines else "no change of plant was declared")
        return
    since_ns = parse_time(time)
    with models.lock():
        if is_wrong:
            change = take_back(models.folder, source, since_ns)
        else:
            if source and not new_source:
                _refuse_unknown(models, source)
            change = declare(models.folder, source, since_ns, reason, datetime.now(UTC))
    click.echo(f"{'taken back: ' if is_wrong else ''}{change_line(change)}")


def _refuse_unknown(models: KeptModels, source: str) -> None:
    """Raise BadChange for a source that no kept model knows; warn where none can tell."""
    known = {name for kept in models.kept() for name in kept.sources()}
    if not known:
        click.echo(
            f"warning: {models.folder} holds no model that knows sources, so nobody can tell "
            f"whether {source!r} is one; `oddbranch models since` shows what is declared",
            err=True,
        )
    elif source not in known:
        raise BadChange(
            f"no kept model in {models.folder} knows the source {source!r}"
            f"{near_words(source, sorted(known))}. Nothing was declared; if the name is right and "
            "the source only too new for a member of its own, add --new-source"
        )
