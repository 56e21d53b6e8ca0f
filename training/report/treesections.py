"""Sections of the report on learning: trees, bins, and how they were chosen."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Final

import numpy as np

from scoring.channels import ChannelTable
from scoring.model import Member
from scoring.tree import Tree
from training.fit import Fitted
from training.members import Learned
from training.report.binpictures import Panel, draw_bins
from training.report.heldpictures import draw_choice
from training.report.page import Section, paragraph, table
from training.report.readings import count_text
from training.report.treepicture import LEAST_NATS, MOST_DRAWN, draw_tree

# Trees of one source that are drawn, and channels whose bins are.
MOST_TREES: Final = 4
MOST_PANELS: Final = 40
# Edges in the table of what sources have in common.
MOST_COMMON: Final = 15

_LEGEND = (
    "Every line is an edge, as wide as its nats: what each of the two channels says of the "
    "other. The number behind a name is that of the edge to its left. Circles are "
    "measurements, squares states, diamonds derived channels."
)


def shown_source(learned: Mapping[str, Learned]) -> str:
    """Return the source whose pictures are shown: the one with most records."""
    return max(learned, key=lambda source: learned[source].density.plain.n_records)


def which_source(learned: Mapping[str, Learned]) -> str:
    """Return a sentence on whose pictures are shown, "" where there is no choice."""
    if len(learned) < 2:
        return ""
    return (
        f"Shown is {shown_source(learned)}, which has most records of the {len(learned)} "
        "sources with a member of their own."
    )


def tree_section(channels: ChannelTable, learned: Mapping[str, Learned], fleet: Member) -> Section:
    """Return the pictures of the shown source's trees; without one, of the fleet's."""
    source = shown_source(learned) if learned else ""
    member = learned[source].member if learned else fleet
    pieces = [paragraph(f"{which_source(learned)} {_LEGEND}".strip())]
    if not learned:
        pieces.insert(0, paragraph("No source has a member of its own; this is the fleet's."))
    names = tree_names(channels, member)
    order = sorted(range(len(member.parts)), key=lambda k: -_n_records(learned, source, k))
    for k in order[:MOST_TREES]:
        of = f"Tree of {source or 'the fleet'} for {names[k]}:"
        pieces += _tree_pieces(channels, member.parts[k].tree, f"tree-{k}", of)
    if len(order) > MOST_TREES:
        pieces.append(
            paragraph(f"Not drawn: {len(order) - MOST_TREES} trees of rarer combinations.")
        )
    if learned:
        pieces.append(_tree_table(channels, learned[source]))
    if len(learned) > 1:
        pieces.append(_common_edges(channels, learned))
    return Section("The tree: what goes with what", tuple(pieces))


def _n_records(learned: Mapping[str, Learned], source: str, k: int) -> int:
    """Return how many records the k-th tree of a member was learned from."""
    if source not in learned:
        return 0
    return fitted_parts(learned[source])[k].n_records


def fitted_parts(one: Learned) -> list[Fitted]:
    """Return what was fitted for each part of a member, in the order of its parts."""
    return [*one.density.regimes.values(), one.density.plain]


def commonest_part(one: Learned) -> int:
    """Return which part of a member was learned from most records, regimes before the rest.

    The tree of all records mixes the regimes, and holds only where none of theirs does.
    """
    n_regimes = len(one.density.regimes)
    counts = [part.n_records for part in fitted_parts(one)]
    return max(range(n_regimes), key=lambda k: counts[k]) if n_regimes else 0


def tree_names(channels: ChannelTable, member: Member) -> list[str]:
    """Return for each part of a member when it holds, in words."""
    if len(member.parts) == 1:
        return ["all records"]
    names = []
    for part in member.parts:
        if part.key is None:
            names.append("all records, used for other combinations")
            continue
        words = []
        for node, number in zip(member.regime, part.key, strict=True):
            channel = channels.nodes[node]
            seen = number < len(channel.words)
            words.append(channel.name + (f" = {channel.words[number]}" if seen else " never seen"))
        names.append(", ".join(words))
    return names


def _tree_pieces(channels: ChannelTable, tree: Tree, name: str, title: str) -> list[str]:
    drawn = draw_tree(channels, tree, name)
    pieces = [paragraph(title), drawn.piece]
    if drawn.n_left_out:
        pieces.append(
            paragraph(
                f"Drawn are the channels on the strongest edges, {MOST_DRAWN} at most; "
                f"{drawn.n_left_out} more have weaker ones."
            )
        )
    if drawn.alone:
        shown = ", ".join(drawn.alone[:MOST_DRAWN])
        more = len(drawn.alone) - MOST_DRAWN
        pieces.append(
            paragraph(
                f"Without an edge of {LEAST_NATS:g} nats or more: "
                f"{shown}{f' and {more} more' if more > 0 else ''}."
            )
        )
    return pieces


def _tree_table(channels: ChannelTable, one: Learned) -> str:
    names = tree_names(channels, one.member)
    rows = [
        (
            name,
            count_text(fitted.n_records),
            str(len(fitted.edges)),
            f"{np.maximum(fitted.tree.nats, 0.0).sum():.1f}",
            str(fitted.choice.n_bins),
            f"{fitted.choice.share:g}",
            masses_text(fitted.choice.mass.tolist()),
        )
        for name, fitted in zip(names, fitted_parts(one), strict=True)
    ]
    text = (
        "The tables of each tree. Mass: how many records the shape of the bivariate normal "
        "counts for, and by how many edges that was chosen. Share: the independent share."
    )
    heading = ("tree", "records", "edges", "nats", "bins", "share", "mass (edges)")
    return paragraph(text) + table(heading, rows, words=(0, 6), wide=True)


def masses_text(masses: Sequence[float]) -> str:
    """Return how many edges chose each mass."""
    return ", ".join(f"{count_text(mass)} ({n})" for mass, n in sorted(Counter(masses).items()))


def _common_edges(channels: ChannelTable, learned: Mapping[str, Learned]) -> str:
    """Return which edges the sources have in common."""
    found: dict[tuple[int, int], list[float]] = {}
    for one in learned.values():
        plain = one.density.plain
        for edge, nats in zip(plain.edges, plain.tree.nats.tolist(), strict=True):
            found.setdefault(edge, []).append(max(nats, 0.0))
    order = sorted(found, key=lambda e: (-len(found[e]), -float(np.median(found[e])), e))
    names = channels.names
    rows = [
        (names[a], names[b], f"{len(found[a, b])} of {len(learned)}",
         f"{np.median(found[a, b]):.2f}", f"{min(found[a, b]):.2f}", f"{max(found[a, b]):.2f}")
        for a, b in order[:MOST_COMMON]
    ]  # fmt: skip
    text = (
        f"Edges that most sources share, the first {len(rows)} of {len(order)}, "
        "from each source's tree over all its records:"
    )
    heading = ("channel", "channel", "sources", "nats, middle", "lowest", "highest")
    return paragraph(text) + table(heading, rows, words=(0, 1), wide=True)


def bin_section(channels: ChannelTable, learned: Mapping[str, Learned]) -> Section:
    """Return each channel's histogram with its bins, of the shown source."""
    one = learned[shown_source(learned)]
    nodes = strongest_nodes(one.density.plain.tree, MOST_PANELS)
    pieces = [
        paragraph(
            f"{which_source(learned)} Above, how often what was read in held-out records, as "
            "square roots, so that what is rare is seen beside what is common; below, the bins, "
            "every second one filled. Words of a state are counted plainly.".strip()
        )
    ]
    if len(nodes) < len(channels.nodes):
        pieces.append(
            paragraph(
                f"Shown are the {len(nodes)} of {len(channels.nodes)} channels with most nats "
                "on their edges."
            )
        )
    panels = [
        Panel(channels.nodes[k], one.member.bins[k], one.held_out.histograms[k]) for k in nodes
    ]
    return Section("Channels and their bins", (*pieces, draw_bins(panels, "bins")))


def strongest_nodes(tree: Tree, n: int) -> list[int]:
    """Return at most n nodes, those with most nats on their edges, in the table's order."""
    total = np.zeros(tree.n_nodes)
    for (a, b), nats in zip(tree.edges.tolist(), tree.nats.tolist(), strict=True):
        total[[a, b]] += nats
    return sorted(np.argsort(-total, kind="stable")[:n].tolist())


def choice_section(learned: Mapping[str, Learned]) -> Section | None:
    """Return what was tried and chosen for the shown source; None where nothing was."""
    choice = learned[shown_source(learned)].density.plain.choice
    if not choice.tried:
        return None
    text = (
        f"{which_source(learned)} Every choice was judged by how probable it made records on "
        "blocks of time that its tables had not seen, for the tree over all records. Higher is "
        "better. With few records a heavy shape and few bins win, with many the counts do."
    )
    tried = [one.n_bins for one in choice.tried]
    if len(tried) > 1 and choice.n_bins in (tried[0], tried[-1]):
        text += f" {choice.n_bins} bins are at the end of what was tried."
    pieces = (paragraph(text.strip()), draw_choice(choice, "choice"))
    return Section("How bins, mass and share were chosen", pieces)
