"""``python -m miner``."""

from miner.cli import main

main()
