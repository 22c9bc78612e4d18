"""What to match: one profile, or several blended."""

from dataclasses import dataclass

from timbre_match.measure.profile import Profile


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Target:
    """A named target made of one or more profiles, kept whole so that nothing about their scatter is lost."""

    name: str
    members: tuple[Profile, ...]
