"""Whether the sides of a comparison rest on the same recordings, and what follows where they do.

A recording is known by its SHA-256; where none is noted, nothing is said.
"""

from timbre_match.compare.target import Target
from timbre_match.errors import ControlError
from timbre_match.measure.profile import Profile

_LISTED = 3


def same_recording_remarks(profile: Profile, target: Target) -> tuple[str, ...]:
    """Say that the instrument and the target have recordings in common: between those nothing can differ."""
    ours = _recordings(profile)
    theirs = _recordings(*target.members)
    shared = [sha256 for sha256 in ours if sha256 in theirs]
    if not shared:
        return ()
    if len(shared) == len(ours) == len(theirs):
        return (
            "instrument and target are the same recordings: no difference can show, and that none does says nothing "
            "about how well the instrument repeats; for that, record it again and compare the two",
        )
    more = f" and {len(shared) - _LISTED} more" if len(shared) > _LISTED else ""
    named = ", ".join(ours[sha256] for sha256 in shared[:_LISTED])
    return (
        f"the same recordings on both sides ({len(shared)} of the instrument's {len(ours)}, of the target's "
        f"{len(theirs)}: {named}{more}): what they share cannot differ, so the two seem more alike, and that more "
        "certain, than they are; measure one side without them",
    )


def refuse_shared_control(profile: Profile, target: Target, control: tuple[Profile, Profile]) -> None:
    """Refuse a control whose recordings stand elsewhere in the comparison too.

    Raises
    ------
    ControlError
        If the two controls have a recording in common, or one of them has one in common with the instrument or the
        target. It would count as evidence of a difference that is not there, and make the answer surer than it is.
    """
    now, then = (_recordings(one) for one in control)
    _refuse("control now", now, "control then", then)
    for name, recordings in (("control now", now), ("control then", then)):
        _refuse(name, recordings, "the instrument", _recordings(profile))
        _refuse(name, recordings, "the target", _recordings(*target.members))


def _refuse(name: str, recordings: dict[str, str], other_name: str, others: dict[str, str]) -> None:
    shared = [sha256 for sha256 in recordings if sha256 in others]
    if not shared:
        return
    file, other_file = recordings[shared[0]], others[shared[0]]
    renamed = f", there named {other_file}" if other_file != file else ""
    more = f" (and {len(shared) - 1} more)" if len(shared) > 1 else ""
    raise ControlError(
        f"the recording {file}{more} is one of {other_name} too{renamed}",
        where=name,
        cause="the same profile was named twice, or one recording was measured into two profiles",
        remedy="name two profiles of an instrument that has not changed, each from recordings of its own: one made in "
        "the instrument's session, one in the target's; where both were recorded in one session, leave the control out",
    )


def _recordings(*profiles: Profile) -> dict[str, str]:
    """File names by SHA-256."""
    return {
        source.sha256: source.file
        for profile in profiles
        for take in profile.takes
        for source in take.recordings
        if source.sha256
    }
