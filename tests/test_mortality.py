import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from planner import mortality
from planner.diagnostics import InputError
from planner.household import OwnLifeTable
from planner.mortality import (
    LifeTable,
    available_tables,
    death_probabilities,
    describe,
    gompertz_death_probability,
    horizon,
    life_expectancy,
    load_table,
    own_table,
    survival,
    transitions,
    years_to_omega,
)

REFERENCE = Path(__file__).parent / "reference"
ONS = Path(__file__).parents[2] / "shared" / "reference" / "ons_uk_life_table_2022_2024.csv"


def rows(path):
    lines = path.read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


def code_of(raised):
    return [d.code for d in raised.value.diagnostics]


def makeham(ages, a=0.00022, b=2.7e-6, c=1.124):
    """Death probabilities where mu = A + B c^x (Dickson, Hardy & Waters, ch. 3)."""
    return -np.expm1(-(a + b * c**ages * (c - 1.0) / np.log(c)))


@pytest.mark.parametrize("sex", ["female", "male"])
def test_published_life_expectancies_of_the_social_security_table(sex):
    """SSA period life table 2022 prints e_x to two decimals, from deaths spread over the year."""
    table = load_table("us-ssa-2022")
    published = rows(REFERENCE / "ssa_period_life_table_2022.csv")[: table.omega]
    computed = [life_expectancy(table, sex, int(row["age"])) for row in published]
    # 0.005 for the printed decimals and 0.005 for q printed to six
    assert_allclose(computed, [float(row[f"{sex}_ex"]) for row in published], rtol=0, atol=0.01)


@pytest.mark.parametrize("sex", ["female", "male"])
def test_social_security_probabilities_are_the_published_ones(sex):
    table = load_table("us-ssa-2022")
    published = [float(row[f"{sex}_qx"]) for row in rows(REFERENCE / "ssa_period_life_table_2022.csv")]
    assert_array_equal(table.probabilities(sex), published)


@pytest.mark.parametrize(("sex", "mode", "dispersion"), [("female", 89.444, 9.010), ("male", 86.307, 9.683)])
def test_gompertz_table_is_its_law(sex, mode, dispersion):
    table = load_table("uk-gompertz-2022-24")
    ages = np.arange(table.first_age, table.omega)
    law = gompertz_death_probability(ages, mode, dispersion)
    assert_allclose(table.probabilities(sex)[:-1], law, atol=1e-10)  # printed to ten decimals


@pytest.mark.parametrize(("sex", "fitted", "published"), [("female", 21.19, 21.16), ("male", 18.73, 18.73)])
def test_gompertz_fit_at_65(sex, fitted, published):
    """Published: ONS National Life Tables, United Kingdom, 2022-24."""
    computed = life_expectancy(load_table("uk-gompertz-2022-24"), sex, 65)
    assert computed == pytest.approx(fitted, abs=0.005)
    assert computed == pytest.approx(published, abs=0.04)  # the law is a fit


@pytest.mark.skipif(not ONS.exists(), reason=f"{ONS.name}, which is not copied here, is absent")
@pytest.mark.parametrize("sex", ["female", "male"])
def test_gompertz_fit_against_the_ons_table(sex):
    table = load_table("uk-gompertz-2022-24")
    published = {int(row["age"]): float(row[f"{sex}_ex"]) for row in rows(ONS)}
    excess = [life_expectancy(table, sex, age) - published[age] for age in range(60, 91)]
    assert_allclose(excess[:11], 0.0, atol=0.1)  # 60 to 70
    # from 80 the fit lives longer, as its header says; half a printed decimal of slack
    assert 0.28 < min(excess[20:])
    assert max(excess[20:]) < 0.555


def test_gompertz_survival_as_published():
    """Milevsky & Huang (2011), Financial Analysts Journal 67(2), m 89.335, b 9.5, from 65 (recomputed)."""
    alive = survival(gompertz_death_probability(np.arange(65, 140), 89.335, 9.5))
    assert_allclose(alive[[10, 20, 25, 30, 35]], [0.8659, 0.5733, 0.3696, 0.1758, 0.0500], atol=5e-5)
    # deaths at mid-year against the integral: second order in the force of mortality
    assert 0.5 + alive[1:].sum() == pytest.approx(21.1411, abs=2e-3)


@pytest.mark.parametrize(
    ("age", "q", "annuity", "joint"),
    [(60, 0.003398, 14.9041, 13.2497), (65, 0.005915, 13.5498, 11.6831), (70, 0.010413, 12.0083, 9.9774)],
)
def test_annuities_of_the_standard_ultimate_life_table(age, q, annuity, joint):
    """SOA Standard Ultimate Life Table, interest 5 %: annuities-due on one and two lives of one age.

    a_65 and A_65 as published; the rest computed two ways. Four decimals.
    """
    deaths = makeham(np.arange(age, 140.0))
    assert deaths[0] == pytest.approx(q, abs=5e-7)
    discount = 1.05 ** -np.arange(deaths.size + 1)
    single, _ = transitions(deaths)
    couple, _ = transitions(deaths, deaths)
    alone, status = [np.ones(1)], [np.array([1.0, 0.0, 0.0])]
    for t in range(deaths.size):
        alone.append(alone[-1] @ single[t])
        status.append(status[-1] @ couple[t])
    both, first, second = np.array(status).T
    assert discount @ np.array(alone)[:, 0] == pytest.approx(annuity, abs=5e-5)
    assert discount @ both == pytest.approx(joint, abs=5e-5)
    # last survivor: a + a - a_xx; twice the roundings above
    assert discount @ (both + first + second) == pytest.approx(2 * annuity - joint, abs=2e-4)


@given(st.lists(st.tuples(st.floats(0, 1), st.floats(0, 1)), min_size=1, max_size=8))
def test_chances_sum_to_one(pairs):
    a, b = np.array(pairs).T
    for transition, death in (transitions(a, b), transitions(a)):
        assert_allclose(transition.sum(axis=2) + death, 1.0, rtol=1e-14)
        assert (transition >= 0.0).all()


def test_who_is_alive_in_order_both_first_second():
    transition, death = transitions([0.1], [0.4])
    assert_allclose(transition[0], [[0.54, 0.36, 0.06], [0, 0.9, 0], [0, 0, 0.6]], rtol=1e-14)
    assert_allclose(death[0], [0.04, 0.1, 0.4], rtol=1e-14)


@pytest.mark.parametrize("bad", [([0.1], [0.1, 0.2]), ([1.1], [0.1]), ([-0.1], None), ([np.nan], None)])
def test_impossible_probabilities_are_refused(bad):
    with pytest.raises(ValueError, match=r"lengths|probabilities"):
        transitions(*bad)


@pytest.mark.parametrize("name", available_tables())
@given(
    sex=st.sampled_from(["female", "male"]),
    age=st.integers(50, 100),
    low=st.floats(0, 3),
    more=st.floats(0, 5),
)
def test_heavier_mortality_never_raises_survival(name, sex, age, low, more):
    table = load_table(name)
    n_years = years_to_omega(table, age)
    light = survival(death_probabilities(table, sex, age, n_years, low))
    heavy = survival(death_probabilities(table, sex, age, n_years, low + more))
    assert (heavy <= light).all()
    assert heavy[-1] == 0.0
    assert life_expectancy(table, sex, age, low + more) <= life_expectancy(table, sex, age, low)


@pytest.mark.parametrize("name", available_tables())
def test_every_table_is_closed_and_carries_its_source(name):
    table = load_table(name)
    for q in (table.female, table.male):
        assert q[-1] == 1.0
        assert ((q > 0.0) & (q <= 1.0)).all()
        assert not q.flags.writeable
    assert table.title
    assert table.publisher
    assert table.source
    row = next(row for row in describe() if row.name == name)
    assert row.ages == (table.first_age, table.omega)
    assert row.year == table.year >= 2000


def test_death_is_certain_at_omega_and_after_and_ruled_out_before_the_planning_age():
    table = load_table("us-ssa-2022")
    q = death_probabilities(table, "female", 90, 35, 1.0, plan_to_age=95)
    assert_array_equal(q[:5], 0.0)
    assert q[5] == table.female[95]
    assert_array_equal(q[119 - 90 :], 1.0)
    assert (q[5 : 119 - 90] < 1.0).all()
    assert_array_equal(death_probabilities(table, "female", 117, 3, 1.0, plan_to_age=130), [0.0, 0.0, 1.0])


def test_multiplier_is_capped():
    table = load_table("us-ssa-2022")
    q = death_probabilities(table, "male", 65, 50, 2.0)
    assert_allclose(q[:20], 2.0 * table.male[65:85])
    assert q.max() == 1.0


def test_improvement_counts_from_the_year_of_the_table():
    q, fall = np.array([0.1, 0.2, 0.3, 1.0]), np.array([0.02, 0.01, 0.0, 0.0])
    table = LifeTable("t", "t", "", "", 2020, 60, q, q, fall, fall)
    improved = death_probabilities(table, "male", 60, 4, 1.5, plan_year=2026)
    assert_allclose(improved, [1.5 * 0.1 * 0.98**6, 1.5 * 0.2 * 0.99**7, 1.5 * 0.3, 1.0])
    with pytest.raises(ValueError, match="plan_year"):
        death_probabilities(table, "male", 60, 4)


def test_horizon_is_the_longer_life_unless_survival_is_negligible():
    ten = [0.5] * 9 + [1.0]
    assert horizon(ten) == 10
    assert horizon([0.95] * 20) == 7  # .05^6 is 1.6e-8, .05^7 is 8e-10
    assert horizon([0.0] * 19 + [1.0]) == 20
    assert horizon([1.0] * 10, ten) == 10
    assert horizon(ten, [1.0] * 10) == 10


def test_horizon_of_a_couple_uses_the_last_survivor():
    table = load_table("us-ssa-2022")
    n_years = max(years_to_omega(table, 67), years_to_omega(table, 64))
    q_first = death_probabilities(table, "male", 67, n_years)
    q_second = death_probabilities(table, "female", 64, n_years)
    anyone = 1.0 - (1.0 - survival(q_first)) * (1.0 - survival(q_second))
    n = horizon(q_first, q_second)
    assert n <= n_years
    assert anyone[n - 1] >= 1e-9 > anyone[n]


@pytest.mark.parametrize(
    ("name", "age"), [("us-ssa-2022", 119), ("us-ssa-2022", 125), ("uk-gompertz-2022-24", 49)]
)
def test_a_client_outside_the_table_is_refused(name, age):
    for call in (
        lambda: years_to_omega(load_table(name), age),
        lambda: death_probabilities(load_table(name), "male", age, 5),
        lambda: life_expectancy(load_table(name), "male", age),
    ):
        with pytest.raises(InputError) as raised:
            call()
        assert code_of(raised) == ["age-outside-table"]


def test_unknown_table_names_the_near_miss():
    with pytest.raises(InputError) as raised:
        load_table("us-ssa-2202")
    assert code_of(raised) == ["life-table-unknown"]
    assert "us-ssa-2022" in str(raised.value)


def test_own_table_is_closed_by_the_model():
    table = own_table(OwnLifeTable((60, 61, 62), (0.1, 0.2, 0.4), (0.2, 0.3, 0.5)))
    assert table.omega == 62
    assert_array_equal(death_probabilities(table, "female", 60, 4), [0.1, 0.2, 1.0, 1.0])
    assert life_expectancy(table, "male", 60) == pytest.approx(0.5 + 0.8 + 0.8 * 0.7)


@pytest.mark.parametrize(
    "own",
    [
        OwnLifeTable((), (), ()),
        OwnLifeTable((60, 62), (0.1, 0.2), (0.1, 0.2)),
        OwnLifeTable((60, 61), (0.1,), (0.1, 0.2)),
        OwnLifeTable((60, 61), (0.1, 1.2), (0.1, 0.2)),
    ],
)
def test_an_own_table_with_gaps_is_refused(own):
    with pytest.raises(InputError) as raised:
        own_table(own)
    assert code_of(raised) == ["life-table-invalid"]


def test_an_own_table_may_say_that_death_is_certain_before_its_end():
    """A chance of 0 or 1 is allowed at any age; beyond either it is not."""
    table = own_table(OwnLifeTable((90, 91, 92), (0.0, 1.0, 1.0), (1.0, 0.5, 0.9)))
    assert_array_equal(table.female, [0.0, 1.0, 1.0])
    assert_array_equal(table.male, [1.0, 0.5, 1.0])
    with pytest.raises(InputError):
        own_table(OwnLifeTable((90, 91), (0.1, 1.0 + 1e-9), (0.1, 1.0)))


def test_survival_starts_with_a_living_person():
    assert_array_equal(survival([0.5, 1.0]), [1.0, 0.5, 0.0])


def test_years_to_the_end_of_the_table():
    """At omega itself death is certain within the year, which counts."""
    assert years_to_omega(load_table("us-ssa-2022"), 65) == 119 - 65 + 1
    assert years_to_omega(load_table("us-ssa-2022"), 118) == 2


def test_the_horizon_ends_below_a_billionth():
    assert horizon([1.0 - 1.05e-9, 0.5, 1.0]) == 2
    assert horizon([1.0 - 0.95e-9, 0.5, 1.0]) == 1
    assert horizon([0.1, 0.1]) == 2  # chances that end before life does: as far as they go


def test_a_negative_multiplier_is_refused():
    with pytest.raises(ValueError, match="negative"):
        death_probabilities(load_table("us-ssa-2022"), "male", 65, 5, -0.1)
    assert death_probabilities(load_table("us-ssa-2022"), "male", 65, 5, 0.0).max() == 0.0


def test_one_impossible_probability_among_good_ones_is_refused():
    with pytest.raises(ValueError, match="probabilities"):
        transitions([0.1, 1.1])


TABLE = """# title: Freedonia, life table: 2020
# publisher: Office of Numbers
# source: invented for this test
# year: 2020
# a remark without a colon's use
age,female,male,female_improvement,male_improvement
60,0.1,0.2,0.01,0.03
61,0.3,0.4,0.02,0.04
62,0.5,0.6,0.00,0.00
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A folder of life tables with one table and a file that is none."""
    (tmp_path / "freedonia.csv").write_text(TABLE, encoding="utf-8")
    (tmp_path / "README.md").write_text("not a table", encoding="utf-8")
    monkeypatch.setattr(mortality, "_folder", lambda: tmp_path)
    load_table.cache_clear()
    yield tmp_path
    load_table.cache_clear()


def test_a_table_added_as_one_file(folder):
    """Listed with its source; each sex with probabilities and improvement of its own."""
    assert available_tables() == ("freedonia",)
    (said,) = describe()
    assert (said.title, said.publisher) == ("Freedonia, life table: 2020", "Office of Numbers")
    assert (said.year, said.ages, said.improvement) == (2020, (60, 62), True)
    table = load_table("freedonia")
    for sex, q, fall in (("female", [0.1, 0.3], [0.01, 0.02]), ("male", [0.2, 0.4], [0.03, 0.04])):
        found = death_probabilities(table, sex, 60, 3, plan_year=2021)
        expected = np.array(q) * (1.0 - np.array(fall)) ** [1, 2]
        assert_allclose(found, [*expected, 1.0], rtol=1e-14)


@pytest.mark.parametrize(
    ("old", "new", "why"),
    [("61,", "63,", "not consecutive"), (",female,", ",women,", "needed"), (",male,", ",men,", "needed")],
)
def test_a_table_that_is_not_sound_is_refused(folder, old, new, why):
    (folder / "freedonia.csv").write_text(TABLE.replace(old, new, 1), encoding="utf-8")
    with pytest.raises(ValueError, match=why):
        load_table("freedonia")


def test_a_name_like_no_other_is_answered_with_all_there_are():
    with pytest.raises(InputError) as raised:
        load_table("zzz")
    assert all(name in str(raised.value) for name in available_tables())
    with pytest.raises(InputError, match="did you mean 'us-ssa-2022'"):
        load_table("us-ssa-2202")
