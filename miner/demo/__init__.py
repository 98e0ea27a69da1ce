"""An invented scenario with planted combinations, to try the tool on and to test it against."""
