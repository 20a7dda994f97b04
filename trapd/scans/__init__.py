"""Tickle scans: counts against the frequency of a weak excitation, and the secular frequency they show."""
