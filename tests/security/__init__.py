"""What inputs may never do: run code, write elsewhere, or let a password out."""
