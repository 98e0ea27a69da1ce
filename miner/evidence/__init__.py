"""Statistics that the report shows beyond the tables: one file a subject, ``gather`` for all."""

from __future__ import annotations
