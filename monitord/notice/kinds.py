"""The kinds of event that this version can raise, and which of them are alarms while they last."""

CHANNEL_KINDS = ("carrier-loss", "overmodulation-negative", "overmodulation-positive")
"""Kinds that belong to a channel; each is an alarm while it lasts."""

DAEMON_KINDS = ("daemon-started", "daemon-stopped")
"""Kinds of the daemon itself; over as soon as they are told."""

SOURCE_KINDS = ("source-lost", "source-gap", *DAEMON_KINDS)
"""Kinds that belong to the source or the daemon and have no channel."""

SOURCE_ALARMS = ("source-lost", "source-gap")
"""Those of `SOURCE_KINDS` that are an alarm while they last; the others are only counted."""

EVENT_KINDS = CHANNEL_KINDS + SOURCE_KINDS
"""All kinds."""
