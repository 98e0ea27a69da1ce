"""Things done to the program while it works: killed, stopped, out of room, for a long time.

``python -m tests.faults --kills 200`` and ``python -m tests.faults.soak --hunts 500`` are the long
forms; ``reports/faults.md`` tells what they showed.
"""
