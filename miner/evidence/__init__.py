"""Statistics that the report shows beyond the tables: one file a subject, ``gather`` for all."""

from miner.evidence.gather import gather
from miner.evidence.records import Evidence

__all__ = ["Evidence", "gather"]
