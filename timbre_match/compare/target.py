"""What to match: one profile, or several blended."""

from dataclasses import dataclass

from timbre_match.errors import ComparisonError
from timbre_match.measure.profile import Profile


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Target:
    """A named target made of one or more profiles, kept whole so that nothing about their scatter is lost."""

    name: str
    members: tuple[Profile, ...]


def blend(name: str, profiles: tuple[Profile, ...]) -> Target:
    """Target of several profiles: its levels are the mean of theirs in dB, after their gains are aligned note by note.

    Raises
    ------
    ComparisonError
        If there is no profile, or one of them holds no note.
    """
    if not profiles:
        raise ComparisonError("a target needs at least one profile", remedy="name one or more measured profiles")
    for profile in profiles:
        if not any(take.notes for take in profile.takes):
            raise ComparisonError(
                f"the profile of {profile.instrument or 'an unnamed instrument'} holds no note",
                remedy="measure it again from recordings with held notes",
            )
    return Target(name=name, members=tuple(profiles))


def as_target(match: Profile | Target) -> Target:
    """Return a target as it is; a plain profile is a target with one member, named after its instrument and stage."""
    if isinstance(match, Target):
        return match
    name = " ".join(part for part in (match.instrument, match.stage) if part)
    return blend(name or "target", (match,))
