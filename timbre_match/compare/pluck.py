r"""Where a string was plucked, and what that does to the recipe: the player's share, taken out of the differences.

A string that is plucked at a share beta of its length moves in harmonic k as far as sin(k pi beta) says, and a pluck at
a node of a harmonic leaves that harmonic silent (Fletcher & Rossing 1998, *The Physics of Musical Instruments*, chapter
2; estimated from the partials of one pluck: Traube & Smith 2000, Estimating the plucking point on a guitar string,
*DAFx-00*). In dB it is a comb over the harmonics, which stands out where its teeth are deeper than what body and
string do to single harmonics anyway. Seen from either end of the string a pluck makes the same comb, so beta lies
between 0 and 1/2.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.compare.records import PluckNote, PluckPoint
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile, Take
from timbre_match.measure.records import Recipe
from timbre_match.units import note_number

Array = NDArray[np.float64]

_TOP_HZ = 6000.0
_MOST_HARMONICS = 40
_LEAST_HARMONICS = 8
_DEPTH = 0.08
"""How much of a harmonic is left where the pluck has its node: a finger or a plectrum has a width, and the string two
polarisations. 22 dB down, which is as deep as the teeth of real recipes mostly are."""
_BODY_DB = 4.0
"""What body and string do to single harmonics beyond a smooth course; the errors of levels are set against it."""
_GRID = np.arange(0.02, 0.5001, 0.0025)
_PERMUTATIONS = 200
_CHANCE = 0.05
_NEAR = 0.02
_ONE_PLACE = 0.9
_LEAST_SE = 0.003
_SURE = 3.0
_LEAST_DIFFERENCE_DB = 1.5
_BETTER = 2.0
"""Taking combs out must make the takes' recipes likelier to be one by this much (natural logarithm)."""
_NULL = 0.03
"""Share of its full power at which a harmonic is too near to a null: 15 dB down."""
_NO_FLOOR_DB = 300.0
_SEED = 1
_LISTED = 6


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Plucks:
    """Both sides with the plucks' combs taken out where that can be done, and what was found about each note."""

    profile: Profile
    target: Target
    notes: tuple[PluckNote, ...]
    remarks: tuple[str, ...]


def comb_db(k: ArrayLike, beta: ArrayLike, depth: float = 0.0) -> Array:
    """Level of each harmonic of a pluck, dB re a pluck at an antinode: 10 log10(sin^2(k pi beta) + depth^2).

    Parameters
    ----------
    k, beta : arrays that broadcast
    depth : float
        Amplitude that is left at a null; with 0 a null lies hundreds of dB down, or at minus infinity.
    """
    wave = np.sin(np.pi * np.asarray(k, dtype=np.float64) * np.asarray(beta, dtype=np.float64))
    with np.errstate(divide="ignore"):
        return np.asarray(10.0 * np.log10(wave**2 + depth**2))


def pluck_point(recipe: Recipe) -> PluckPoint | None:
    """Where the string was plucked, from one recipe; None where the comb does not stand out.

    The levels are a parabola over log k, the comb, and chance. A comb stands out if it explains more than the best comb
    does for the same levels in random order, in all but 5 % of 200 orders (permutation test: Pitman 1937, *Supplement
    to the J. R. Stat. Soc.* 4), and if nine tenths of the likelihood lie within 0.02 of one place.

    Parameters
    ----------
    recipe : Recipe
        Of a ringing note; its harmonics up to 6 kHz and up to the 40th count, eight at least.
    """
    used = np.flatnonzero(recipe.heard & (recipe.freq_hz < _TOP_HZ) & (recipe.k <= _MOST_HARMONICS))
    if recipe.ringing is None or used.size < _LEAST_HARMONICS:
        return None
    k = recipe.k[used].astype(np.float64)
    weight = 1.0 / np.hypot(_BODY_DB, recipe.se_db[used])
    octave = np.log2(k)
    course = np.linalg.qr(np.column_stack([np.ones(k.size), octave, octave**2]) * weight[:, None])[0]

    def beside_course(values: Array) -> Array:
        return np.asarray(values - (values @ course) @ course.T)

    level = beside_course(recipe.level_db[used] * weight)
    combs = beside_course(comb_db(k, _GRID[:, None], _DEPTH) * weight)
    power = np.sum(combs**2, axis=1)
    rng = np.random.default_rng(_SEED)
    orders = beside_course(rng.permuted(np.tile(level, (_PERMUTATIONS, 1)), axis=1))
    rows = np.vstack([level, orders])
    before = np.sum(rows**2, axis=1)
    left = np.maximum(before[:, None] + power - 2.0 * rows @ combs.T, 1e-9)
    gain = before / left.min(axis=1)
    if np.count_nonzero(gain[1:] >= gain[0]) > _CHANCE * _PERMUTATIONS:
        return None
    freedom = k.size - 3
    likelihood = np.exp(-0.5 * freedom * np.log(left[0] / left[0].min()))
    near = np.abs(_GRID - _GRID[np.argmax(likelihood)]) < _NEAR
    inside = likelihood * near
    if np.sum(inside) < _ONE_PLACE * np.sum(likelihood):
        return None
    beta = float(np.sum(inside * _GRID) / np.sum(inside))
    spread = float(np.sqrt(np.sum(inside * (_GRID - beta) ** 2) / np.sum(inside)))
    return PluckPoint(beta=beta, se=max(spread, _LEAST_SE))


def compare_plucks(profile: Profile, target: Target) -> Plucks:
    """Find the pluck points of the notes that both sides have, and take different ones out of the recipes.

    That is done note by note, where every take's pluck point can be told, two of them differ beyond their errors and by
    enough to matter, and the recipes of all takes come closer to each other by it. Levels near a null are set aside on
    both sides; others get the uncertainty of their comb on top of their error. Where a pluck point cannot be told,
    nothing is taken out.
    """
    sides = _plucked_notes((profile,)), _plucked_notes(target.members)
    names = sorted(sides[0].keys() & sides[1].keys(), key=note_number)
    notes: list[PluckNote] = []
    combs: dict[int, Recipe] = {}
    for name in names:
        ours, theirs = sides[0][name], sides[1][name]
        points = [pluck_point(recipe) for recipe in (*ours, *theirs)]
        differs = _differ(points, [*ours, *theirs])
        set_aside: tuple[int, ...] = ()
        cleaned = _without_combs([*ours, *theirs], points) if differs else None
        if cleaned is not None:
            set_aside, recipes = cleaned
            combs.update({id(old): new for old, new in zip((*ours, *theirs), recipes, strict=True)})
        notes.append(
            PluckNote(
                note=name,
                instrument=tuple(points[: len(ours)]),
                target=tuple(points[len(ours) :]),
                differs=differs,
                taken_out=cleaned is not None,
                set_aside=set_aside,
            )
        )
    members = tuple(_replaced(member, combs) for member in target.members)
    return Plucks(
        profile=_replaced(profile, combs),
        target=replace(target, members=members) if combs else target,
        notes=tuple(notes),
        remarks=_remarks(notes),
    )


def _plucked_notes(profiles: tuple[Profile, ...]) -> dict[str, list[Recipe]]:
    found: dict[str, list[Recipe]] = {}
    for profile in profiles:
        for take in profile.takes:
            for recipe in take.notes:
                if recipe.ringing is not None:
                    found.setdefault(recipe.note, []).append(recipe)
    return found


def _replaced(profile: Profile, combs: dict[int, Recipe]) -> Profile:
    if not combs:
        return profile

    def changed(take: Take) -> Take:
        return replace(take, notes=tuple(combs.get(id(recipe), recipe) for recipe in take.notes))

    return replace(profile, takes=tuple(changed(take) for take in profile.takes))


def _differ(points: list[PluckPoint | None], recipes: list[Recipe]) -> bool:
    """Whether two of the pluck points that can be told differ beyond their errors, and by enough to matter."""
    told = [(point, recipe) for point, recipe in zip(points, recipes, strict=True) if point is not None]
    for place, (one, recipe) in enumerate(told):
        for other, _ in told[place + 1 :]:
            if abs(one.beta - other.beta) <= _SURE * np.hypot(one.se, other.se):
                continue
            k = recipe.k[recipe.heard]
            apart = comb_db(k, one.beta, _DEPTH) - comb_db(k, other.beta, _DEPTH)
            if float(np.std(apart)) >= _LEAST_DIFFERENCE_DB:
                return True
    return False


def _without_combs(
    recipes: list[Recipe], points: list[PluckPoint | None]
) -> tuple[tuple[int, ...], list[Recipe]] | None:
    """Harmonics set aside, and the recipes without their combs; None where that cannot be done, or is no gain."""
    told = [point for point in points if point is not None]
    if len(told) < len(points):
        return None
    highest = max(int(recipe.k[-1]) for recipe in recipes)
    k = np.arange(1, highest + 1)
    nulls = np.any([np.sin(np.pi * k * point.beta) ** 2 < _NULL for point in told], axis=0)
    cleaned = [_without_comb(recipe, point, nulls) for recipe, point in zip(recipes, told, strict=True)]
    plain = [_masked(recipe, nulls) for recipe in recipes]
    before, after = _disagreement(plain, highest), _disagreement(cleaned, highest)
    if before is None or after is None or 0.5 * before[1] * np.log(before[0] / after[0]) < _BETTER:
        return None
    heard = np.any([_padded(recipe.heard.astype(np.float64), highest) > 0 for recipe in recipes], axis=0)
    return tuple((np.flatnonzero(nulls & heard) + 1).tolist()), cleaned


def _without_comb(recipe: Recipe, point: PluckPoint, nulls: NDArray[np.bool_]) -> Recipe:
    wave = np.pi * recipe.k * point.beta
    comb = comb_db(recipe.k, point.beta, _DEPTH)
    slope = 20.0 / np.log(10.0) * np.pi * recipe.k * np.sin(wave) * np.cos(wave) / (np.sin(wave) ** 2 + _DEPTH**2)
    masked = _masked(recipe, nulls)
    level_db = masked.level_db - comb
    total_db = 10.0 * np.log10(np.nansum(10.0 ** (level_db / 10.0))) if masked.heard.any() else 0.0
    return replace(
        masked,
        level_db=level_db - total_db,
        se_db=np.hypot(masked.se_db, slope * point.se),
        floor_db=masked.floor_db - comb - total_db,
    )


def _masked(recipe: Recipe, nulls: NDArray[np.bool_]) -> Recipe:
    """The recipe with the harmonics near a null not heard, and their floor so high that nothing follows from that."""
    away = nulls[: recipe.k.size]
    return replace(
        recipe,
        heard=recipe.heard & ~away,
        level_db=np.where(away, np.nan, recipe.level_db),
        se_db=np.where(away, np.nan, recipe.se_db),
        phase_rad=np.where(away, np.nan, recipe.phase_rad),
        floor_db=np.where(away, _NO_FLOOR_DB, recipe.floor_db),
    )


def _disagreement(recipes: list[Recipe], highest: int) -> tuple[float, int] | None:
    """Sum of squares of the recipes about their mean, less gains and slopes, dB^2, and its degrees of freedom.

    None where fewer than eight harmonics are heard in all.
    """
    levels: Array = np.array([_padded(recipe.level_db, highest) for recipe in recipes])
    both = np.isfinite(levels).all(axis=0)
    if np.count_nonzero(both) < _LEAST_HARMONICS:
        return None
    octave = np.log2(np.flatnonzero(both) + 1.0)
    course = np.linalg.qr(np.column_stack([np.ones(octave.size), octave]))[0]
    levels = levels[:, both] - levels[:, both].mean(axis=0)
    return float(np.sum((levels - (levels @ course) @ course.T) ** 2)), octave.size - 2


def _padded(values: Array, size: int) -> Array:
    return np.concatenate([values, np.full(size - values.size, np.nan)])


def _remarks(notes: list[PluckNote]) -> tuple[str, ...]:
    """Say where the pluck points differ, what was done about it, and where they cannot be told."""
    if not notes:
        return ()
    remarks = []
    out = [one for one in notes if one.taken_out]
    seen = [one for one in notes if one.differs and not one.taken_out]
    untold = [one for one in notes if not any(one.instrument) or not any(one.target)]
    if out:
        aside = sum(len(one.set_aside) for one in out)
        remarks.append(
            "plucked at different points, as shares of the string's length: "
            + "; ".join(f"{one.note} {_points(one.instrument)} against {_points(one.target)}" for one in out[:_LISTED])
            + (f"; and {len(out) - _LISTED} more" if len(out) > _LISTED else "")
            + ". That is the player's doing and not the instrument's: its pattern over the harmonics is taken out of "
            f"the differences of these notes ({len(out)} of {len(notes)})"
            + (f", and {aside} harmonics next to a node of the pluck are set aside" if aside else "")
        )
    if seen:
        named = ", ".join(f"{one.note} ({_points(one.instrument)} against {_points(one.target)})" for one in seen[:4])
        more = f" and {len(seen) - 4} more" if len(seen) > 4 else ""
        remarks.append(
            f"plucked at different points, but it cannot be taken out of {named}{more}: not every take tells where, or "
            "taking it out brings the takes no closer; what the pluck does is still in the differences of these notes"
        )
    if untold:
        remarks.append(
            f"where the string was plucked cannot be told on both sides of {len(untold)} of {len(notes)} notes; "
            "nothing is taken out there, so keep to one pluck point"
        )
    return tuple(remarks)


def _points(points: tuple[PluckPoint | None, ...]) -> str:
    told = [point.beta for point in points if point is not None]
    if not told:
        return "cannot tell"
    low, high = f"{min(told):.2f}", f"{max(told):.2f}"
    return low if low == high else f"{low} to {high}"
