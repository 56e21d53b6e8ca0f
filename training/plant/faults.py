"""Incidents put to work: severities for the physics, changes to the readings."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from training.plant import columns as col
from training.plant.channels import N_CHANNELS, NAMES
from training.plant.incidents import KINDS, Incident
from training.plant.instruments import SPREAD, TYPICAL
from training.plant.severity import fault_column, severity_for
from training.plant.utility import SEED_DAY, Physics

# Last key of the seed branch that feeds noisy instruments, beside the day's own draws.
_NOISE_BRANCH: Final = 1


def growth(incident: Incident, times_ns: NDArray[np.int64]) -> NDArray[np.float64]:
    """Return how much of an incident is there, (n,): 0 outside, up to 1 inside."""
    inside = (times_ns >= incident.start_ns) & (times_ns < incident.end_ns)
    rise_ns = KINDS[incident.kind].rise * (incident.end_ns - incident.start_ns)
    if rise_ns == 0:
        return inside.astype(np.float64)
    return np.where(inside, np.clip((times_ns - incident.start_ns) / rise_ns, 0.0, 1.0), 0.0)


class FaultSet:
    """One station's incidents, with what stuck instruments remember between two calls."""

    def __init__(self, physics: Physics, incidents: tuple[Incident, ...]) -> None:
        self._instrument = tuple(i for i in incidents if not KINDS[i.kind].of_machine)
        self._machine = tuple(
            (i, fault_column(i.kind, i.pump), severity_for(physics, i))
            for i in incidents
            if KINDS[i.kind].of_machine
        )
        self._held: dict[int, float] = {}

    def severities(self, times_ns: NDArray[np.int64]) -> NDArray[np.float64]:
        """Return the columns `faults` for these times, (n, N_FAULTS)."""
        faults = np.zeros((len(times_ns), col.N_FAULTS))
        for incident, column, severity in self._machine:
            if _touches(incident, times_ns):
                faults[:, column] += severity * growth(incident, times_ns)
        return faults

    def disturb(
        self,
        readings: NDArray[np.float64],
        times_ns: NDArray[np.int64],
        noise: dict[int, NDArray[np.float64]],
    ) -> None:
        """Change readings (n, n_channels) in place as the faulty instruments would.

        noise: standard normals of these times for the channels that `noisy` names.
        """
        for number, incident in enumerate(self._instrument):
            if _touches(incident, times_ns):
                self._disturb_one(number, incident, readings, times_ns, noise)

    def noisy(self, times_ns: NDArray[np.int64]) -> tuple[int, ...]:
        """Return the channels, by number, that need extra noise in these times."""
        noisy = (i for i in self._instrument if i.kind == "noise" and _touches(i, times_ns))
        return tuple(sorted({NAMES.index(i.channels[0]) for i in noisy}))

    def _disturb_one(
        self,
        number: int,
        incident: Incident,
        readings: NDArray[np.float64],
        times_ns: NDArray[np.int64],
        noise: dict[int, NDArray[np.float64]],
    ) -> None:
        share = growth(incident, times_ns)
        rows = (times_ns >= incident.start_ns) & (times_ns < incident.end_ns)
        if not rows.any():
            return
        channel = NAMES.index(incident.channels[0])
        reading = readings[:, channel]
        if incident.kind == "swap":
            other = NAMES.index(incident.channels[1])
            was = reading[rows].copy()
            reading[rows] = readings[rows, other]
            readings[rows, other] = was
        elif incident.kind == "stuck":
            reading[rows] = self._held.setdefault(number, float(reading[rows.argmax()]))
        else:
            assert incident.size is not None
            departure = incident.direction * incident.size * SPREAD[channel]
            if incident.kind == "scaling":
                reading *= 1.0 + share * departure / TYPICAL[channel]
            elif incident.kind == "noise":
                reading += share * departure * noise[channel]
            else:
                reading += share * departure


def _touches(incident: Incident, times_ns: NDArray[np.int64]) -> bool:
    return bool(
        len(times_ns) and incident.start_ns <= times_ns[-1] and times_ns[0] < incident.end_ns
    )


def draw_noise(
    seed: int, station: int, day: int, channel: int, n_steps: int
) -> NDArray[np.float64]:
    """Return a day's standard normals, (n_steps,), for one noisy instrument."""
    assert 0 <= channel < N_CHANNELS
    key = (SEED_DAY, station, day, _NOISE_BRANCH, channel)
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=key))
    return rng.standard_normal(n_steps)
