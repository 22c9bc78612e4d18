"""Whether both sides were recorded in one session, as far as the maker noted it, and what follows where they were not.

Only what both sides have noted can contradict: what is not noted may well have been the same.
"""

from collections.abc import Sequence

from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile, Session

_NOTED = ("date", "room", "microphone")
_LISTED = 3
_LONGEST = 40


def session_remarks(profile: Profile, target: Target) -> tuple[str, ...]:
    """Say what differs between the sessions of the instrument and of the target, where there is no control."""
    others = _elsewhere(profile.session, target.members)
    if not others:
        return ()
    return (
        f"recorded in another session than {_which(others, target)} ({_apart(profile.session, others)}): microphone, "
        "room and player are in the difference; an instrument that has not changed, recorded in both sessions, takes "
        "them out (--control-now, --control-then)",
    )


def control_remark(profile: Profile, target: Target, control: tuple[Profile, Profile], evidence: str) -> str:
    """Say what a control does, and where it was not recorded in the sessions that it stands for.

    Parameters
    ----------
    profile : Profile
    target : Target
    control : (now, then)
        An instrument that has not changed, recorded with the instrument and with the target.
    evidence : str
        What the control's change was found from, such as "38 harmonics of 4 notes".
    """
    now, then = control
    name = now.instrument or then.instrument or "unnamed"
    misplaced = []
    if _elsewhere(now.session, (profile,)):
        apart = _apart(now.session, [profile.session])
        misplaced.append(f"the control now was not recorded in the instrument's session ({apart})")
    if others := _elsewhere(then.session, target.members):
        misplaced.append(
            f"the control then was recorded in another session than {_which(others, target)} "
            f"({_apart(then.session, others)})"
        )
    if not misplaced:
        return (
            f"what the control ({name}) seems to have changed by between the sessions is subtracted, as a curve from "
            f"{evidence}; its uncertainty is in the intervals"
        )
    return (
        f"{'; '.join(misplaced)}: what the control ({name}) seems to have changed by is subtracted all the same, as a "
        f"curve from {evidence}, but there it is not the change of microphone, room and player that is in the "
        "difference; take a control from those sessions, or compare without one"
    )


def _elsewhere(session: Session, profiles: Sequence[Profile]) -> list[Session]:
    """Sessions of the profiles that are noted otherwise."""
    return [one.session for one in profiles if _differing(session, one.session)]


def _which(others: Sequence[Session], target: Target) -> str:
    count = len(target.members)
    return "the target" if len(others) == count else f"{len(others)} of the target's {count} members"


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
