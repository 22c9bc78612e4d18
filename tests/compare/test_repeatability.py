import csv
from importlib import resources

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from timbre_match.compare.repeatability import GROUPS, fit_variance_prior, group_of, moderated_variance, scatter_prior


def rows(name: str) -> list[dict[str, str]]:
    text = resources.files("timbre_match.compare").joinpath("data", name).read_text(encoding="utf-8")
    return list(csv.DictReader(text.splitlines()))


@pytest.mark.parametrize(
    ("family", "group"),
    [
        ("violin", "bowed strings"),
        ("Double-Bass", "bowed strings"),
        ("baroque cello", "bowed strings"),
        ("clarinet", "reeds"),
        ("alto saxophone", "reeds"),
        ("flute", "flute"),
        ("trumpet", "brass"),
        ("French horn", "brass"),
        ("classical guitar", "all instruments"),
        ("", "all instruments"),
        ("violinist's whistle", "all instruments"),
    ],
)
def test_family_finds_its_nearest_group(family: str, group: str) -> None:
    assert group_of(family) == group


def test_single_instrument_group_has_the_robust_deviation_of_the_table() -> None:
    prior = scatter_prior("flute")
    table = [float(row["sd_per_take_db_robust"]) for row in rows("repeatability.csv") if row["instrument"] == "flute"]
    # Median absolute deviation of the t distribution, from scipy, brings the scale back to the table's column.
    robust = prior.scale_db * 1.4826 * stats.t.ppf(0.75, prior.tail_df)
    assert robust == pytest.approx(table, rel=1e-12)


@pytest.mark.parametrize("group", list(GROUPS))
def test_scatter_lies_within_its_members_range(group: str) -> None:
    members = [row for row in rows("repeatability.csv") if row["instrument"] in GROUPS[group]]
    robust = [float(row["sd_per_take_db_robust"]) for row in members]
    prior = scatter_prior("guitar" if group == "all instruments" else GROUPS[group][0])
    scale = prior.scale_at(np.geomspace(30.0, 20000.0, 50)) * 1.4826 * stats.t.ppf(0.75, prior.tail_df)
    assert prior.group == group
    assert np.all((scale >= min(robust) - 1e-9) & (scale <= max(robust) + 1e-9))


def test_every_instrument_of_the_tables_speaks_in_a_group() -> None:
    for name in ("repeatability.csv", "take_structure.csv"):
        assert {row["instrument"] for row in rows(name)} == set(GROUPS["all instruments"])


def test_variance_prior_is_recovered_from_draws_of_its_own_model() -> None:
    rng = np.random.default_rng(5)
    d0, s0, d = 6.0, 2.0, 3.0
    true_variance = s0 * d0 / rng.chisquare(d0, 40_000)
    sample = true_variance * rng.chisquare(d, 40_000) / d
    prior_df, prior_variance = fit_variance_prior(sample, d)
    assert prior_df == pytest.approx(d0, rel=0.1)
    assert prior_variance == pytest.approx(s0, rel=0.03)


@given(
    s2=st.floats(1e-3, 1e3), d=st.integers(1, 50), d0=st.floats(0.1, 100), s0=st.floats(1e-3, 1e3),
)  # fmt: skip
def test_moderated_variance_lies_between_sample_and_prior(s2: float, d: int, d0: float, s0: float) -> None:
    value = float(moderated_variance(s2, d, prior_df=d0, prior_variance=s0))
    assert min(s2, s0) * (1 - 1e-12) <= value <= max(s2, s0) * (1 + 1e-12)


def test_prior_alone_speaks_without_repeats_and_when_it_is_certain() -> None:
    assert moderated_variance([np.nan, 5.0], [0, 2], prior_df=4.0, prior_variance=1.5)[0] == 1.5
    assert moderated_variance(5.0, 2, prior_df=np.inf, prior_variance=1.5) == 1.5


@pytest.mark.parametrize("variance", [[1.0], [1.0, 0.0]])
def test_too_few_or_zero_variances_are_refused(variance: list[float]) -> None:
    with pytest.raises(ValueError, match="positive variances"):
        fit_variance_prior(variance, 3)
