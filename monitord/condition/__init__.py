"""From the source's samples to one baseband row per channel."""
