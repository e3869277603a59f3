"""The time as a record writes it."""

from __future__ import annotations

from datetime import UTC, datetime


def now() -> str:
    """UTC, whole seconds."""
    return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
