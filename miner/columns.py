"""Every column of the candidates table, once, with its type."""

from __future__ import annotations

CANDIDATE_COLUMNS: dict[str, str] = {
    "target": "text",
    "stratum": "text",
    "combination": "text",
    "size": "integer",
    "triggers": "integer",
    "hits": "integer",
    "precision": "number",
    "precision_low": "number",
    "precision_high": "number",
    "base_rate": "number",
    "expected_hits": "number",
    "lift": "number",
    "p_value": "number",
    "q_value": "number",
    "p_own_timing": "number",
    "rule_order": "integer",
    "sharpens": "text",
    "explained_by": "text",
    "holdout_triggers": "integer",
    "holdout_hits": "integer",
    "holdout_precision": "number",
    "holdout_low": "number",
    "holdout_high": "number",
    "holdout_base_rate": "number",
    "holdout_expected_hits": "number",
    "holdout_p_value": "number",
    "verdict": "text",
}

CONFIRMED = "confirmed"
REFUTED = "refuted"
UNDERPOWERED = "underpowered"
EXPLAINED = "explained"
NOT_SIGNIFICANT = "not significant"

JOINER = " + "
POOLED = "all"

# How an entity's and a date's share combine in the margins null.
ODDS = "odds"
HAZARD = "hazard"
