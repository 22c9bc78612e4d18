"""How a verdict and a user's text look, the same in tables and figures."""

from typing import Final

from timbre_match.advise.wording import plain as plain
from timbre_match.compare.records import Interval, SustainVerdict, Verdict

SIGN: Final[dict[Verdict, str]] = {"stronger": "▲", "weaker": "▼", "alike": "=", "unsettled": "?"}
SUSTAIN_SIGN: Final[dict[SustainVerdict, str]] = {"longer": "▶", "shorter": "◀", "alike": "=", "unsettled": "?"}
"""The shape of a verdict as a character; every sign is in the font that matplotlib brings along."""

VERDICTS: Final[tuple[Verdict, ...]] = ("stronger", "weaker", "alike", "unsettled")
SUSTAIN_VERDICTS: Final[tuple[SustainVerdict, ...]] = ("longer", "shorter", "alike", "unsettled")


def signed(difference_db: float) -> str:
    """Return a difference with its sign and one decimal; what rounds to zero has no sign."""
    text = f"{difference_db:+.1f}"
    return "0.0" if text in ("+0.0", "-0.0") else text.replace("-", "−")


def signed_interval(difference_db: Interval) -> str:
    """Return a difference with its interval, such as ``−4.6 (−6.0 to −3.1)``."""
    return f"{signed(difference_db.value)} ({signed(difference_db.low)} to {signed(difference_db.high)})"


def ratio_interval(ratio: Interval) -> str:
    """Return a ratio of decay times with its interval, such as ``0.65 (0.52 to 0.80)``."""
    return f"{ratio.value:.2f} ({ratio.low:.2f} to {ratio.high:.2f})"
