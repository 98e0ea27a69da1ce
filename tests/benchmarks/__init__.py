"""Time and memory of whole hunts, their growth, other ways to the same counts, physical limits.

``python -m tests.benchmarks --help`` says what can be run; `DEVELOPERS.md` says when.
"""
