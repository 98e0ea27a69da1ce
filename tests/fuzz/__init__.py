"""Fuzzing: the program against the slow twin, against odd settings and logs, against broken files.

``python -m tests.fuzz --minutes 10`` runs all of it, ``python -m tests.fuzz.twin --studies 3000``
the comparison with the twin alone. Failures are printed with the seed or the file that brings
them back.
"""

import sys
from pathlib import Path

# The twin and the tiny worlds are imported as they are under pytest, so that there is one of each.
sys.path[:0] = [str(Path(__file__).parents[1])]
