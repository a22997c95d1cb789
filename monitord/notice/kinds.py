"""The kinds of event that this version can raise, and which of them last."""

CHANNEL_KINDS = ("carrier-loss", "overmodulation-negative", "overmodulation-positive")
"""Kinds that belong to a channel; each of them lasts from its beginning to its end."""

SOURCE_KINDS = ("source-lost", "source-gap", "daemon-started", "daemon-stopped")
"""Kinds that belong to the source or the daemon and have no channel."""

LASTING_SOURCE_KINDS = ("source-lost", "source-gap")
"""Those of `SOURCE_KINDS` that last; the others are over as soon as they are told."""

EVENT_KINDS = CHANNEL_KINDS + SOURCE_KINDS
"""All kinds."""
