"""From a record to an alert, pure: no network, no clock, no environment.

What is shared by the offline and the online path lives here, so that a replay
takes exactly the way a live record takes. See DEVELOPERS.md for the order of
the modules.
"""
