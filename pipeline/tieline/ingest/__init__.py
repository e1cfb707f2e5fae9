"""The stage `ingest`."""

from tieline.ingest.stage import ingest

__all__ = ["ingest"]
