"""Profile and target to comparison."""

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np

    from timbre_match.compare.records import Comparison
    from timbre_match.compare.target import Target
    from timbre_match.measure.profile import Profile


def compare(
    profile: "Profile",
    target: "Profile | Target",
    *,
    margin_db: float = 3.0,
    control_now: "Profile | None" = None,
    control_then: "Profile | None" = None,
    rng: "np.random.Generator | None" = None,
) -> "Comparison":
    """Compare an instrument with a target; see :func:`timbre_match.compare.comparison.compare`.

    The room has the same name as what is done in it, so this door stands in its ``__init__``; what is behind it is
    imported when it is used.
    """
    from timbre_match.compare.comparison import compare as compare_in_full

    return compare_in_full(
        profile, target, margin_db=margin_db, control_now=control_now, control_then=control_then, rng=rng
    )
