"""Measurements as ratios against a peer in the same run; ``make bench`` prints them.

A ratio says the same on a slow machine and a quick one. Nothing here fails a test: a limit that is
passed over is printed as such, for a person to look at.
"""
