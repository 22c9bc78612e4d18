"""Whether both sides were recorded in one session, as far as the maker noted it, and what follows where they were not.

Only what both sides have noted can contradict: what is not noted may well have been the same.
"""

from collections.abc import Sequence

from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile, Session

_NOTED = ("date", "room", "microphone")
_LISTED = 3
_LONGEST = 40


def session_remarks(
    profile: Profile, target: Target, control: tuple[Profile, Profile] | None = None
) -> tuple[str, ...]:
    """Say where the instrument, the target and the control were recorded in sessions that differ.

    Parameters
    ----------
    profile : Profile
    target : Target
    control : (now, then), optional
        An instrument that has not changed, recorded with the instrument and with the target.

    Returns
    -------
    tuple of str
        Without a control, what differs between the sessions of instrument and target; with one, which of its
        profiles was not recorded in the session that it stands for.
    """
    members = [member.session for member in target.members]
    if control is not None:
        now, then = (one.session for one in control)
        return _misplaced("now", now, [profile.session], "instrument") + _misplaced("then", then, members, "target")
    others = [session for session in members if _differing(profile.session, session)]
    if not others:
        return ()
    which = "the target" if len(others) == len(members) else f"{len(others)} of the target's {len(members)} members"
    return (
        f"recorded in another session than {which} ({_apart(profile.session, others)}): microphone, room and player "
        "are in the difference; an instrument that has not changed, recorded in both sessions, takes them out "
        "(--control-now, --control-then)",
    )


def _misplaced(which: str, control: Session, sessions: Sequence[Session], side: str) -> tuple[str, ...]:
    """Say that a control was recorded in none of the sessions that it stands for."""
    if not all(_differing(control, session) for session in sessions):
        return ()
    return (
        f"control {which}: not recorded in the {side}'s session ({_apart(control, sessions)}), so it cannot tell what "
        "microphone, room and player did there",
    )


def _differing(one: Session, other: Session) -> tuple[str, ...]:
    """Names of what both have noted, and noted differently."""
    pairs = {name: (_plain(getattr(one, name)), _plain(getattr(other, name))) for name in _NOTED}
    return tuple(name for name, (here, there) in pairs.items() if here and there and here != there)


def _apart(one: Session, others: Sequence[Session]) -> str:
    """What was noted against what the others noted, such as "date 2026-03-01 against 2026-01-10; room A against B"."""
    parts = []
    for name in _NOTED:
        # By their plain form, so that two spellings of one thing are listed once.
        found = {
            _plain(getattr(other, name)): getattr(other, name) for other in others if name in _differing(one, other)
        }
        if found:
            listed = [_shown(text) for text in list(found.values())[:_LISTED]]
            more = f" and {len(found) - _LISTED} more" if len(found) > _LISTED else ""
            parts.append(f"{name} {_shown(getattr(one, name))} against {', '.join(listed)}{more}")
    return "; ".join(parts)


def _plain(text: str) -> str:
    return text.strip().casefold()


def _shown(text: str) -> str:
    text = text.strip()
    return text if len(text) <= _LONGEST else text[: _LONGEST - 1] + "…"
