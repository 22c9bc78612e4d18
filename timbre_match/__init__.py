"""timbre_match: what an instrument's notes are made of, and how they differ from a target."""
