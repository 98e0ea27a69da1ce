"""Audits: does anything look ahead, does the holdout leak, do alarms about leaks ring rightly."""
