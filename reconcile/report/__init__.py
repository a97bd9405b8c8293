"""Reports for people, drawn from the result document alone; nothing is computed here."""
