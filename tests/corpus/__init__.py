"""Runs of small explicit solvers whose truth is known, and how well the detector does on them."""
