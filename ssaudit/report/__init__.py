"""Terminal tables, JSON and CSV of what was found; nothing is computed here."""
