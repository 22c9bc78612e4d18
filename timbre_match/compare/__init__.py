"""Profile and target to comparison."""
