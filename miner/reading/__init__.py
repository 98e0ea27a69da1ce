"""The parts of the table reader: sources in, arrays out. Everyone else uses `read_tables`."""
