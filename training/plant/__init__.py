"""An invented water utility whose faults are known, to show and judge the whole job.

Booster pumping stations alike in design and different in their offsets, simulated
from pump and system curves, with instruments that are noisy, late, rounded and
sometimes silent. Seeds below 1000 are for development; seeds from 9000 upwards are
for published figures only and are never looked at while anything is being tuned.
"""
