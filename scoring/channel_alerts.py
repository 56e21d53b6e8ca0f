"""Alerts of channels: which are stuck, absent or outside their span, in one alert a kind.

Channels join the open alert of their kind and leave it; with none left it is cleared.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace

import numpy as np

from scoring.alert_rules import Rules
from scoring.alert_standing import Case
from scoring.alert_turn import NO_LONGER_WATCHED, Turn
from scoring.alerts import ABSENT, SPAN, STUCK, Alert, Suspect, blank_alert
from scoring.channels import Channel
from scoring.sentences import absent_text, span_text, stuck_text
from scoring.suspicion import N_SUSPECTS, Batch

CHANNEL_KINDS = (STUCK, ABSENT, SPAN)


class ChannelAlerts:
    """The alerts of a source's channels in one turn. Instrument n stands for the source."""

    def __init__(
        self, turn: Turn, rules: Rules, batch: Batch, instruments: tuple[Channel, ...], model: str
    ) -> None:
        self.turn, self.rules, self.batch, self.model = turn, rules, batch, model
        self.instruments = instruments
        self.place = {channel.name: i for i, channel in enumerate(instruments)}
        self.place[""] = len(instruments)

    def join(self, kind: str, row: int, channels: Sequence[int], since_ns: int, code: int) -> None:
        """Let channels be part of their kind's alert, which is raised for the first ones.

        code: of the states that hold, see scoring.stillness.
        """
        time_ns = int(self.batch.times_ns[row])
        names = tuple(self._name(i) for i in channels)
        suspects = tuple(self._reading_of(row, i) for i in channels if self._name(i))
        case = self.turn.cases.get(kind)
        if case is None:
            blank = blank_alert(self.batch.source, kind, "", since_ns, time_ns, self.model)
            beside = self.rules.beside[channels[0]] if names[0] else ()
            case = Case(replace(blank, neighbours=beside), -1)
        alert, active = case.alert, tuple(dict.fromkeys([*case.active, *names]))
        known = {one.channel for one in alert.suspects}
        more = (one for one in suspects if one.channel not in known)
        alert = replace(
            alert,
            suspects=(*alert.suspects, *more)[:N_SUSPECTS],
            channels=tuple(dict.fromkeys([*alert.channels, *(name for name in names if name)])),
        )
        alert = replace(alert, sentence=self._sentence(alert, active, code))
        case = replace(case, alert=alert, active=active)
        if kind not in self.turn.cases:
            self.turn.open(kind, time_ns, case)
            return
        self.turn.cases[kind] = case
        self.turn.worsen(kind, time_ns, "grown")

    def leave(self, kind: str, at_ns: int, channels: Iterable[int], code: int) -> None:
        """Take channels out of their kind's alert, if it is open."""
        names = {self._name(i) for i in channels}
        if kind in self.turn.cases:
            active = tuple(one for one in self.turn.cases[kind].active if one not in names)
            self._set_active(kind, at_ns, active, "", code)

    def drop_unknown(self, at_ns: int) -> None:
        """Take channels out of open alerts that the model does not watch."""
        for kind in CHANNEL_KINDS:
            case = self.turn.cases.get(kind)
            if case is not None and not all(name in self.place for name in case.active):
                active = tuple(name for name in case.active if name in self.place)
                self._set_active(kind, at_ns, active, NO_LONGER_WATCHED, -1)

    def _set_active(
        self, kind: str, at_ns: int, active: tuple[str, ...], why: str, code: int
    ) -> None:
        if not active:
            self.turn.clear(kind, at_ns, why)
            return
        case = self.turn.cases[kind]
        alert = replace(case.alert, sentence=self._sentence(case.alert, active, code))
        self.turn.cases[kind] = replace(case, alert=alert, active=active)

    def _name(self, channel: int) -> str:
        return self.instruments[channel].name if channel < len(self.instruments) else ""

    def _channel(self, name: str) -> Channel | None:
        i = self.place.get(name, -1)
        return self.instruments[i] if 0 <= i < len(self.instruments) else None

    def _reading_of(self, row: int, channel: int) -> Suspect:
        value, instrument = float(self.batch.values[row, channel]), self.instruments[channel]
        reading = value if np.isfinite(value) else None
        time_ns = int(self.batch.times_ns[row])
        return Suspect(
            instrument.name, instrument.unit, reading, None, None, None, None, time_ns, 0.0
        )

    def _sentence(self, alert: Alert, active: tuple[str, ...], code: int) -> str:
        source, first = alert.source, active[0]
        readings = {one.channel: one.reading for one in alert.suspects}
        reading = readings.get(first)
        number = reading if isinstance(reading, float) else None
        if alert.kind == ABSENT:
            return absent_text(source, active, alert.since_ns)
        if alert.kind == SPAN:
            return span_text(source, active, number, self._channel(first))
        return stuck_text(
            source,
            active,
            number,
            self._channel(first),
            alert.since_ns,
            self._normal_s(first, code),
        )

    def _normal_s(self, name: str, code: int) -> float:
        """Return a channel's longest normal stillness under some states, inf if unknown."""
        i = self.place.get(name, -1)
        where = np.flatnonzero(self.rules.codes == code)
        if i < 0 or not len(where):
            return float("inf")
        still_s, moving_s = self.rules.longest[where[0], :, i]
        return float(still_s if np.isfinite(still_s) else moving_s)
