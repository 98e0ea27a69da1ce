"""The study of the tool's own error rates: level, false discoveries, recovery and power.

``python -m tests.calibration --form full`` runs every part and writes one json line a run, so
that an interruption loses nothing; ``--report reports`` turns the lines into
reports/calibration.md.
"""
