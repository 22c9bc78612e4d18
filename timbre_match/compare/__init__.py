"""Profile and target to comparison."""

from timbre_match.compare.comparison import compare, tolerance_db
from timbre_match.compare.records import Comparison
from timbre_match.compare.target import Target, blend

__all__ = ["Comparison", "Target", "blend", "compare", "tolerance_db"]
