"""What a drill found, in words and tables, for the terminal, the page and other programs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any, Final

from scoring.sentences import lasting_text
from training.drilled import CAUGHT_SHARE, Result
from training.planting import DRIFT, NOISE, OFFSET, SCALING, SIZED, STUCK, SWAP

HEADING: Final = (
    "channel", "offset", "drift", "noise", "scaling", "stuck", "swaps caught", "right suspect",
)  # fmt: skip
_NEVER: Final = "not caught"


def drill_lines(
    results: Sequence[Result], step_s: float, within: int, unwatched: dict[str, str]
) -> list[str]:
    """Return the drill for a person: a line a channel, then what nothing watches."""
    lines = [what_line(results, step_s, within)]
    rows = [HEADING, *(channel_cells(name, results, step_s) for name in names_of(results))]
    widths = [max(len(row[k]) for row in rows) for k in range(len(HEADING))]
    for row in rows:
        cells = zip(row, widths, strict=True)
        lines.append("  " + "  ".join(cell.ljust(width) for cell, width in cells).rstrip())
    lines += [f"  nothing watches {name}: {why}" for name, why in unwatched.items()]
    return lines


def what_line(results: Sequence[Result], step_s: float, within: int) -> str:
    """Return what the table's numbers mean."""
    n = max((one.n_trials for one in results), default=0)
    return (
        f"smallest fault caught in {100 * CAUGHT_SHARE:.0f} % of {n} trials within {within} "
        f"records ({lasting_text(within * step_s)}), in the channel's own unit"
    )


def names_of(results: Sequence[Result]) -> list[str]:
    """Return the channels of the results in their order."""
    return list(dict.fromkeys(one.channel for one in results))


def channel_cells(name: str, results: Sequence[Result], step_s: float) -> tuple[str, ...]:
    """Return one channel's line of the table."""
    own = {one.kind: one for one in results if one.channel == name and one.kind != SWAP}
    swaps = [one for one in results if one.kind == SWAP and name in (one.channel, one.partner)]
    sizes = [size_text(own.get(kind), step_s) for kind in (OFFSET, DRIFT, NOISE, SCALING, STUCK)]
    n_right = sum(one.right for one in own.values())
    n_caught = sum(one.caught for one in own.values())
    right = f"{100 * n_right / n_caught:.0f} %" if n_caught else "-"
    caught = f"{sum(one.is_caught for one in swaps)} of {len(swaps)}" if swaps else "-"
    return (name, *sizes, caught, right)


def size_text(result: Result | None, step_s: float) -> str:
    """Return the smallest size that is caught, in its unit; or the share that was."""
    if result is None:
        return "-"
    if result.size is None:
        share = 100 * result.caught / result.n_trials
        return f"{_NEVER} ({share:.0f} %)"
    if result.kind == STUCK:
        return lasting_text(result.size * step_s)
    unit = "%" if result.kind == SCALING else result.unit
    return f"{result.size:.3g} {unit}".rstrip()


def as_data(
    results: Sequence[Result],
    within: int,
    step_s: float,
    seed: int,
    model: str,
    unwatched: dict[str, str],
) -> dict[str, Any]:
    """Return the whole drill as plain data, for drill.json."""
    return {
        "model": model,
        "seed": seed,
        "within_records": within,
        "step_s": step_s,
        "caught_share": CAUGHT_SHARE,
        "sized_kinds": list(SIZED),
        "results": [
            asdict(one) | {"is_caught": one.is_caught, "caught_limits": list(one.caught_limits)}
            for one in results
        ],
        "unwatched": unwatched,
    }
