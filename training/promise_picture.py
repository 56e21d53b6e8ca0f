"""The curve of a promise as a picture: what every pair of levels would cost."""

from __future__ import annotations

from matplotlib.figure import Figure

from training.promise import Promise
from training.report.figures import RUST, SLATE, TEAL, draw


def promise_picture(promise: Promise) -> str:
    """Return expected alerts a day over the level on sustained; the chosen pair marked."""
    points = [point for point in promise.curve if point.rate > 0]
    levels = [point.sustained for point in points]
    rates = [promise.n_sources * point.rate for point in points]

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        axes.plot(levels, rates, color=TEAL)
        axes.scatter([promise.sustained], [promise.per_day()], s=60, color=TEAL, zorder=3)
        axes.axhline(promise.alerts_per_day, color=RUST, ls="--", label="budget")
        if promise.sustained_highest < max(levels):
            axes.axvline(promise.sustained_highest, color=SLATE, ls=":", label="highest seen")
        axes.set_yscale("log")
        axes.set_xlabel("level on sustained, nats; the one on excess moves with it")
        axes.set_ylabel("alerts a day")
        axes.legend()

    return draw(
        paint,
        name="promise",
        alt=f"Expected alerts a day fall from {max(rates):.3g} to {min(rates):.3g} as the level on "
        f"sustained rises from {min(levels):.3g} to {max(levels):.3g} nats; chosen are "
        f"{promise.sustained:.3g} nats for {promise.per_day():.3g} a day.",
        caption="Episodes counted in held-out time, along the tail where too few were seen.",
        height_in=2.8,
    )
