"""What is written down: profiles, targets and comparisons as files."""
