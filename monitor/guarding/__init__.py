"""The parts of guard, each with one job; `monitor.guard` puts them together."""
