"""From an export to a bank: one reader a format, and the checks."""
