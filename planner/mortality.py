"""Life tables, one-year death probabilities, the horizon, and who is alive from year to year.

Lives are independent. Every table is closed by the model: at its last age, omega, and after,
death within the year is certain, whatever the published table says there.
"""

from __future__ import annotations

import csv
import difflib
from dataclasses import dataclass
from functools import cache
from importlib import resources
from importlib.abc import Traversable

import numpy as np
from numpy.typing import ArrayLike

from planner.diagnostics import Diagnostic, InputError
from planner.household import OwnLifeTable, Sex
from planner.piecewise import FloatArray
from planner.soa_tables import is_number, numbered_table

NEGLIGIBLE_SURVIVAL = 1e-9  # the horizon ends where anyone is alive with less chance than this


@dataclass(frozen=True, slots=True, eq=False)
class LifeTable:
    """One-year death probabilities by whole age and sex.

    Attributes
    ----------
    name, title, publisher, source
        The name used in workbooks; what the table is; who published it; where it was taken from.
    year : int
        Calendar year the probabilities describe; improvement factors count from it.
    first_age : int
        Age of the first entry; ages are consecutive.
    female, male : ndarray of shape (n_ages,)
        ``q[k]``: chance that a person aged ``first_age + k`` dies within the year. The last is 1.
    female_improvement, male_improvement : ndarray of shape (n_ages,) or None
        Yearly fall of each probability, as a share: ``q(year) = q (1 - f)^(year - table year)``.
    """

    name: str
    title: str
    publisher: str
    source: str
    year: int
    first_age: int
    female: FloatArray
    male: FloatArray
    female_improvement: FloatArray | None = None
    male_improvement: FloatArray | None = None

    @property
    def omega(self) -> int:
        """Last age of the table; death within the year is certain there and after."""
        return self.first_age + self.female.size - 1

    def probabilities(self, sex: Sex) -> FloatArray:
        """Death probabilities by age from `first_age`, shape (n_ages,)."""
        return self.female if sex == "female" else self.male

    def improvement(self, sex: Sex) -> FloatArray | None:
        """Yearly improvement factors by age, or None where the table has none."""
        return self.female_improvement if sex == "female" else self.male_improvement


@dataclass(frozen=True, slots=True)
class TableDescription:
    """What `planner tables` says about a life table; `ages` is (first, omega)."""

    name: str
    title: str
    publisher: str
    source: str
    year: int
    ages: tuple[int, int]
    improvement: bool


def available_tables() -> tuple[str, ...]:
    """Names of the shipped life tables, sorted."""
    return tuple(sorted(p.name.removesuffix(".csv") for p in _folder().iterdir() if p.name.endswith(".csv")))


@cache
def load_table(name: str) -> LifeTable:
    """Return a shipped life table, or one by its number (see `planner.soa_tables`).

    A table by number is of one sex; whoever it is given to dies by it.

    Raises
    ------
    InputError
        Code ``life-table-unknown``: no shipped table has this name; ``life-table-number``.
    """
    if is_number(name):
        return _from_number(name)
    known = available_tables()
    if name not in known:
        near = difflib.get_close_matches(name, known, n=1)
        hint = f"did you mean {near[0]!r}?" if near else f"shipped tables are {', '.join(known)}"
        raise InputError([Diagnostic("life-table-unknown", "people", f"no life table {name!r}; {hint}")])
    header, rows = _read(_folder() / f"{name}.csv")
    ages = [int(row["age"]) for row in rows]
    if ages != list(range(ages[0], ages[0] + len(ages))):
        raise ValueError(f"life table {name}: ages are not consecutive")

    def column(field: str) -> FloatArray | None:
        if field not in rows[0]:
            return None
        return np.array([float(row[field]) for row in rows])

    female, male = column("female"), column("male")
    if female is None or male is None:
        raise ValueError(f"life table {name}: columns 'female' and 'male' are needed")
    return LifeTable(
        name=name,
        title=header["title"],
        publisher=header["publisher"],
        source=header["source"],
        year=int(header["year"]),
        first_age=ages[0],
        female=_closed(female),
        male=_closed(male),
        female_improvement=column("female_improvement"),
        male_improvement=column("male_improvement"),
    )


def _from_number(name: str) -> LifeTable:
    found = numbered_table(name)
    q = _closed(np.array(found.values))
    factors = np.array(found.factors) if found.factors else None
    about = (name, found.title, found.publisher, found.source, found.year, found.first_age)
    return LifeTable(*about, q, q, factors, factors)


def own_table(own: OwnLifeTable, year: int = 0) -> LifeTable:
    """Return the workbook's own life table, closed at its last age.

    Raises
    ------
    InputError
        Code ``life-table-invalid``: ages are not consecutive, a column's length differs, or a
        probability lies outside [0, 1].
    """
    ages = own.ages
    columns = (own.women, own.men)
    message = None
    if not ages or list(ages) != list(range(ages[0], ages[0] + len(ages))):
        message = "ages must be consecutive whole numbers, one a row"
    elif any(len(column) != len(ages) for column in columns):
        message = "every age needs a chance of dying for women and for men"
    elif any(not 0.0 <= q <= 1.0 for column in columns for q in column):
        message = "a chance of dying in the year lies between 0 and 1"
    if message:
        raise InputError([Diagnostic("life-table-invalid", "own_life_table", message)])
    female, male = (_closed(np.array(column, dtype=np.float64)) for column in columns)
    return LifeTable(
        "own", "Life table from the client workbook", "", "sheet Life table", year, ages[0], female, male
    )


def describe() -> tuple[TableDescription, ...]:
    """Every shipped life table with its source and the ages it covers."""
    tables = map(load_table, available_tables())
    return tuple(
        TableDescription(
            table.name,
            table.title,
            table.publisher,
            table.source,
            table.year,
            (table.first_age, table.omega),
            table.female_improvement is not None,
        )
        for table in tables
    )


def death_probabilities(
    table: LifeTable,
    sex: Sex,
    age: int,
    n_years: int,
    multiplier: float = 1.0,
    plan_to_age: float | None = None,
    plan_year: int | None = None,
) -> FloatArray:
    r"""One-year death probabilities of a person by plan year.

    .. math:: q_t = \min(1,\; m\, q(x+t)\,(1 - f(x+t))^{Y + t - Y_0}),
        \qquad q_t = 0 \text{ if } x + t < \text{plan\_to\_age}, \qquad q_t = 1 \text{ if } x+t \ge \omega

    The last rule wins over the one before it.

    Parameters
    ----------
    table, sex
        Which probabilities.
    age
        Whole age on the plan date.
    n_years
        Number of plan years.
    multiplier
        Death rates compared with the table; the product is capped at 1.
    plan_to_age
        Deaths are ruled out before this age.
    plan_year
        Calendar year of plan year 0; needed only where the table has improvement factors.

    Returns
    -------
    ndarray of shape (n_years,)
        Chance of dying within year ``t``, given alive at its start.

    Raises
    ------
    InputError
        Code ``age-outside-table``: the age is below the table's first or at or above omega.
    ValueError
        The table improves and `plan_year` is missing, or the multiplier is negative.
    """
    _check_age(table, age)
    if multiplier < 0.0:
        raise ValueError(f"multiplier {multiplier} is negative")
    ages = age + np.arange(n_years)
    index = np.minimum(ages, table.omega) - table.first_age
    q = table.probabilities(sex)[index]
    factors = table.improvement(sex)
    if factors is not None:
        if plan_year is None:
            raise ValueError(f"life table {table.name} improves by year: plan_year is needed")
        q = q * (1.0 - factors[index]) ** (plan_year + np.arange(n_years) - table.year)
    q = np.minimum(1.0, multiplier * q)
    if plan_to_age is not None:
        q[ages < plan_to_age] = 0.0
    q[ages >= table.omega] = 1.0
    return q


def years_to_omega(table: LifeTable, age: int) -> int:
    """Years from `age` to the year in which death is certain, that year included: omega - age + 1.

    Raises
    ------
    InputError
        Code ``age-outside-table``, as `death_probabilities`.
    """
    _check_age(table, age)
    return table.omega - age + 1


def survival(q: ArrayLike) -> FloatArray:
    """Chance of being alive at the start of each year.

    ``S[0] = 1``, ``S[t + 1] = S[t] (1 - q[t])``.

    Parameters
    ----------
    q : array_like of shape (n_years,)
        One-year death probabilities.

    Returns
    -------
    ndarray of shape (n_years + 1,)
    """
    return np.append(1.0, np.cumprod(1.0 - np.asarray(q, dtype=np.float64)))


def horizon(q_first: ArrayLike, q_second: ArrayLike | None = None) -> int:
    """Number of plan years: up to the first year that opens with nobody alive, nearly surely.

    Parameters
    ----------
    q_first, q_second : array_like of shape (n_years,)
        One-year death probabilities, ``n_years`` the larger `years_to_omega` of the people.

    Returns
    -------
    int
        First year ``t >= 1`` at whose start the chance that anyone is alive is below 1e-9, at
        most ``n_years``.
    """
    anyone = survival(q_first)
    if q_second is not None:
        second = survival(q_second)
        # a + b - ab rather than 1 - (1-a)(1-b): keeps its digits where both chances are tiny
        anyone = anyone + second - anyone * second
    below = np.flatnonzero(anyone < NEGLIGIBLE_SURVIVAL)
    return int(below[0]) if below.size else anyone.size - 1


def transitions(q_first: ArrayLike, q_second: ArrayLike | None = None) -> tuple[FloatArray, FloatArray]:
    """Yearly chances of moving between statuses, lives independent.

    For a couple, with A the first person and B the second::

        both -> both (1-qA)(1-qB)   both -> first (1-qA) qB   both -> second qA (1-qB)   both -> none qA qB
        first -> first 1-qA         first -> none qA          (second likewise)

    Parameters
    ----------
    q_first, q_second : array_like of shape (n_years,)
        One-year death probabilities; `q_second` None for a single client.

    Returns
    -------
    transition : ndarray of shape (n_years, n_statuses, n_statuses)
        ``transition[t, h, h']``; statuses in the order both, first, second, or first alone.
    death : ndarray of shape (n_years, n_statuses)
        Chance that nobody is left; each row of `transition` and this sum to 1.

    Raises
    ------
    ValueError
        A probability is outside [0, 1], or the lengths differ.
    """
    a = _probabilities(q_first)
    if q_second is None:
        return (1.0 - a)[:, None, None], a[:, None].copy()
    b = _probabilities(q_second)
    if a.shape != b.shape:
        raise ValueError(f"lengths differ: {a.size} and {b.size}")
    transition = np.zeros((a.size, 3, 3))
    transition[:, 0, 0] = (1.0 - a) * (1.0 - b)
    transition[:, 0, 1] = (1.0 - a) * b
    transition[:, 0, 2] = a * (1.0 - b)
    transition[:, 1, 1] = 1.0 - a
    transition[:, 2, 2] = 1.0 - b
    return transition, np.stack((a * b, a, b), axis=1)


def life_expectancy(
    table: LifeTable, sex: Sex, age: int, multiplier: float = 1.0, plan_year: int | None = None
) -> float:
    """Expected remaining years, deaths at mid-year: ``e_x = 1/2 + sum_{k>=1} kp_x``.

    Taken from the whole table, never from a plan's horizon.

    Parameters
    ----------
    table, sex, age, multiplier, plan_year
        As in `death_probabilities`.

    Returns
    -------
    float
        Years.
    """
    q = death_probabilities(table, sex, age, years_to_omega(table, age), multiplier, None, plan_year)
    return 0.5 + float(survival(q)[1:].sum())


def gompertz_death_probability(age: ArrayLike, mode: float, dispersion: float) -> FloatArray:
    """One-year death probability under Gompertz mortality.

    ``q_x = 1 - exp(-e^((x - m)/b) (e^(1/b) - 1))``, from the force of mortality
    ``mu_x = exp((x - m)/b)/b``.

    Parameters
    ----------
    age : array_like
        Ages ``x`` in years, any shape.
    mode, dispersion
        ``m`` and ``b`` in years.

    Returns
    -------
    ndarray
        Same shape as `age`.
    """
    x = np.asarray(age, dtype=np.float64)
    return -np.expm1(-np.exp((x - mode) / dispersion) * np.expm1(1.0 / dispersion))


def _check_age(table: LifeTable, age: int) -> None:
    if not table.first_age <= age < table.omega:
        raise InputError(
            [
                Diagnostic(
                    "age-outside-table",
                    "people",
                    f"age {age} is outside life table {table.name!r}, which plans for ages "
                    f"{table.first_age} to {table.omega - 1}",
                )
            ]
        )


def _probabilities(q: ArrayLike) -> FloatArray:
    values = np.asarray(q, dtype=np.float64)
    if values.ndim != 1 or not np.all((values >= 0.0) & (values <= 1.0)):
        raise ValueError("death probabilities must be one row of numbers in [0, 1]")
    return values


def _closed(q: FloatArray) -> FloatArray:
    q[-1] = 1.0
    q.setflags(write=False)
    return q


def _folder() -> Traversable:
    return resources.files("planner").joinpath("data", "life_tables")


def _read(path: Traversable) -> tuple[dict[str, str], list[dict[str, str]]]:
    """Return the ``# key: value`` header lines and the rows of a table file."""
    lines = path.read_text(encoding="utf-8").splitlines()
    header = {}
    for line in lines:
        if line.startswith("#") and ":" in line:
            key, _, value = line[1:].partition(":")
            header[key.strip()] = value.strip()
    return header, list(csv.DictReader(line for line in lines if not line.startswith("#")))
