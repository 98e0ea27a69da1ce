"""The quarterly review against slow twins, and against everything that could fool it."""
