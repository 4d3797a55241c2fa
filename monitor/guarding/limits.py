"""How long a request to the reading process may take before that counts as hanging."""

from __future__ import annotations

# A tired network mount still reads a few megabytes a second; listing a folder of a hundred
# thousand files there takes a minute.
_BASE = 90.0
_SLOWEST = 4e6


def seconds_for(size: int) -> float:
    """Time limit for handling `size` bytes of files."""
    return _BASE + size / _SLOWEST
