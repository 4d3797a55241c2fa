"""Parts of the measurement: memory of a channel, its reading, its modes, and where it grows."""
