"""Verdicts against Routh's array in exact fractions, on integer polynomials of degree 2 to 8.

Routh, A Treatise on the Stability of a Given State of Motion (1877); the count of roots to the
right is the Cauchy index by Sturm's chain, Gantmacher, The Theory of Matrices (1959), vol. 2,
ch. XV. Both from memory.
"""

import itertools
import json
from collections.abc import Callable, Iterator
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import ssaudit

# Coefficients from the highest power down.
Polynomial = list[Fraction]
DEGREES = range(2, 9)
MOST_DOUBT = 0.02


def routh_says_stable(p: Polynomial) -> bool:
    """Whether all roots lie to the left: no entry of the array's first column is zero or negative.

    A zero there, with or without a zero row, already tells that not all roots lie to the left, so
    that nothing needs to be put in its place.
    """
    sign = 1 if p[0] > 0 else -1
    upper, lower = ([sign * c for c in p[start::2]] for start in (0, 1))
    while lower:
        if lower[0] <= 0:
            return False
        ratio = upper[0] / lower[0]
        # Rows end in zeros, of which one is enough.
        following = [*lower[1:], Fraction(0)]
        rest = [a - ratio * b for a, b in zip(upper[1:], following, strict=False)]
        upper, lower = lower, rest
    return True


def trimmed(p: Polynomial) -> Polynomial:
    return list(itertools.dropwhile(lambda c: c == 0, p))


def remainder(a: Polynomial, b: Polynomial) -> Polynomial:
    a = list(a)
    while len(a) >= len(b):
        ratio = a[0] / b[0]
        a = [x - ratio * (b[i] if i < len(b) else 0) for i, x in enumerate(a)][1:]
    return trimmed(a)


def sturm_chain(first: Polynomial, second: Polynomial) -> list[Polynomial]:
    """First, second, and each remainder with its sign changed; the last divides all."""
    chain = [trimmed(first), trimmed(second)]
    while chain[-1]:
        chain.append([-c for c in remainder(chain[-2], chain[-1])])
    return chain[:-1]


def changes_of_sign(values: Iterator[Fraction]) -> int:
    signs = [value > 0 for value in values if value != 0]
    return sum(a != b for a, b in itertools.pairwise(signs))


def changes_at_infinity(chain: list[Polynomial], side: int) -> int:
    return changes_of_sign(f[0] * side ** (len(f) - 1) for f in chain)


def roots_right(p: Polynomial) -> int:
    """Number of roots with a positive real part, of a polynomial that has none on the axis.

    On s = jw let p = U + jV. From w = -inf to +inf its argument grows by pi (left - right), which
    is the Cauchy index of U/V (odd degree) or its negative of V/U (even degree).
    """
    n = len(p) - 1
    U, V = [Fraction(0)] * (n + 1), [Fraction(0)] * (n + 1)
    for power, c in enumerate(reversed(p)):
        (U, V)[power % 2][n - power] = c * (-1) ** (power // 2)
    even = n % 2 == 0
    chain = sturm_chain(*((U, V) if even else (V, U)))
    index = changes_at_infinity(chain, -1) - changes_at_infinity(chain, 1)
    return (n - (-index if even else index)) // 2


def has_root_on_axis(p: Polynomial) -> bool:
    """Whether s = 0 is a root, or even and odd part, over x = s^2, share a real root x < 0."""
    n = len(p) - 1
    if p[-1] == 0:
        return True
    even, odd = ([c for i, c in enumerate(p) if (n - i) % 2 == parity] for parity in (0, 1))
    shared = sturm_chain(even, odd)[-1]
    degree = len(shared) - 1
    derivative = [c * (degree - i) for i, c in enumerate(shared[:-1])]
    chain = sturm_chain(shared, derivative)
    return changes_at_infinity(chain, -1) > changes_of_sign(f[-1] for f in chain)


def multiply(*factors: list[int]) -> list[int]:
    product = np.array([1], dtype=object)
    for factor in factors:
        product = np.convolve(product, np.array(factor, dtype=object))
    return [int(c) for c in product]


def stable_polynomial(rng: np.random.Generator, degree: int) -> list[int]:
    pairs = rng.integers(0, degree // 2 + 1)
    slow = [[1, int(rng.integers(1, 7))] for _ in range(degree - 2 * pairs)]
    swinging = [[1, int(rng.integers(1, 5)), int(rng.integers(1, 20))] for _ in range(pairs)]
    return multiply(*slow, *swinging)


def integer_polynomials(rng: np.random.Generator, degree: int) -> Iterator[list[int]]:
    """Monic polynomials of one degree, easy and awkward."""
    for _ in range(20):
        yield stable_polynomial(rng, degree)
        yield [1, *map(int, rng.integers(-5, 10, degree))]
        yield [1, *map(int, rng.integers(1, 12, degree))]
        # Decreasing ratios of neighbours make stability likely, but not sure.
        yield [1, *(int(rng.integers(8, 30)) * 6**k for k in range(degree))]
    for k in (1, 2, -1):
        # All roots in one place, where poles are at their most sensitive.
        yield multiply(*[[1, k]] * degree)
    for place in range(1, degree + 1):
        zeroed, flipped = stable_polynomial(rng, degree), stable_polynomial(rng, degree)
        zeroed[place], flipped[place] = 0, -flipped[place]
        yield zeroed
        yield flipped
    for _ in range(6):
        c = int(rng.integers(1, 9))
        # Roots on the axis: a pair, at the origin, twice over; and symmetric ones off the axis.
        for factor in ([1, 0, c], [1, 0], [1, 0, 2 * c, 0, c * c], [1, 0, -c * c], [1, 0, 0, 0, c]):
            if len(factor) <= degree:
                rest = stable_polynomial(rng, degree + 1 - len(factor))
                yield multiply(factor, rest)
            if len(factor) == degree + 1:
                yield factor


def companion(p: list[int]) -> Any:
    A = np.eye(len(p) - 1, k=-1)
    A[0] = -np.array(p[1:], dtype=float)
    return A


@pytest.fixture(scope="module")
def polynomials() -> dict[int, list[list[int]]]:
    rng = np.random.default_rng(1877)
    return {degree: list(integer_polynomials(rng, degree)) for degree in DEGREES}


@pytest.fixture(scope="module")
def by_library(polynomials: dict[int, list[list[int]]]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Points and modes of one audit a degree; a point is named degree-place."""
    found = []
    for degree, listed in polynomials.items():
        ids = [f"{degree}-{place}" for place in range(len(listed))]
        bank = ssaudit.build_bank([companion(p) for p in listed], revision="routh", ids=ids)
        found.append(ssaudit.audit(bank, ssaudit.Loop("", None, "none"), ssaudit.Criteria()))
    return pd.concat([a.points for a in found]), pd.concat([a.modes for a in found])


def expected(p: list[int]) -> str:
    exact = [Fraction(c) for c in p]
    if has_root_on_axis(exact):
        return "on the axis"
    return "stable" if routh_says_stable(exact) else "unstable"


def disagreements(
    polynomials: dict[int, list[list[int]]], points: pd.DataFrame
) -> tuple[list[str], int, int]:
    """Points whose verdict contradicts Routh's array; doubts off the axis; polynomials off it."""
    allowed = {
        "stable": ("ok", "doubt"),
        "unstable": ("lost", "doubt"),
        "on the axis": ("lost", "doubt"),
    }
    verdicts = dict(zip(points["point"], points["verdict"], strict=True))
    wrong, doubts, off_axis = [], 0, 0
    for degree, listed in polynomials.items():
        for place, p in enumerate(listed):
            verdict, truth = verdicts[f"{degree}-{place}"], expected(p)
            if verdict not in allowed[truth]:
                wrong.append(f"{p} is {truth}, verdict {verdict}")
            off_axis += truth != "on the axis"
            doubts += truth != "on the axis" and verdict == "doubt"
    return wrong, doubts, off_axis


def test_there_are_enough_polynomials_of_every_kind(
    polynomials: dict[int, list[list[int]]],
) -> None:
    kinds = {degree: [expected(p) for p in listed] for degree, listed in polynomials.items()}
    assert sum(map(len, kinds.values())) >= 500
    for degree in DEGREES:
        assert kinds[degree].count("stable") >= 20
        assert kinds[degree].count("unstable") >= 15
        assert kinds[degree].count("on the axis") >= 8
    every = [p for listed in polynomials.values() for p in listed]
    assert sum(0 in p for p in every) >= 100
    assert sum(min(p) < 0 for p in every) >= 100


def test_verdicts_agree_with_the_routh_array(
    polynomials: dict[int, list[list[int]]], by_library: tuple[pd.DataFrame, pd.DataFrame]
) -> None:
    wrong, doubts, off_axis = disagreements(polynomials, by_library[0])
    assert wrong == []
    assert doubts < MOST_DOUBT * off_axis


def test_poles_right_of_the_axis_are_as_many_as_the_cauchy_index_says(
    polynomials: dict[int, list[list[int]]], by_library: tuple[pd.DataFrame, pd.DataFrame]
) -> None:
    points, modes = by_library
    poles = np.where(modes["imag"] > 0, 2, 1)
    right = pd.Series(poles * (modes["real"] > 0)).groupby(modes["point"].to_numpy()).sum()
    lost = set(points["point"][points["verdict"] == "lost"])
    compared = 0
    for degree, listed in polynomials.items():
        for place, p in enumerate(listed):
            point = f"{degree}-{place}"
            if point in lost and expected(p) == "unstable":
                assert right[point] == roots_right([Fraction(c) for c in p]), p
                compared += 1
    assert compared >= 200


def test_the_command_line_gives_the_same_verdicts(
    polynomials: dict[int, list[list[int]]],
    by_library: tuple[pd.DataFrame, pd.DataFrame],
    tmp_path: Path,
    export: Callable[..., Path],
    command: Callable[..., Any],
) -> None:
    """All degrees in one bank of seven sections, a file each."""
    sources = [
        export(
            f"degree-{degree}.h5",
            {"A": [companion(p) for p in listed]},
            ids=[f"{degree}-{place}" for place in range(len(listed))],
        )
        for degree, listed in polynomials.items()
    ]
    bank, loop, criteria = (tmp_path / n for n in ("bank.h5", "loop.toml", "criteria.toml"))
    loop.write_text('feed = "none"\n')
    criteria.write_text("")
    assert command("ingest", *sources, "--revision", "routh", "--bank", bank).code == 0
    ran = command(
        "audit",
        bank,
        "--loop",
        loop,
        "--criteria",
        criteria,
        "--json",
        "-",
        "--csv",
        tmp_path / "points.csv",
    )
    table = pd.read_csv(tmp_path / "points.csv", dtype={"point": str})
    wrong, _, _ = disagreements(polynomials, table)
    assert ran.code == 1
    assert wrong == []
    by_name = table.set_index("point")["verdict"]
    other = by_library[0].set_index("point")["verdict"]
    assert by_name.loc[other.index].tolist() == other.tolist()
    counts = json.loads(ran.out)["points"]
    assert counts["total"] == len(other)
    assert counts["void"] == 0


def test_the_comparison_would_show_wrong_verdicts(
    polynomials: dict[int, list[list[int]]], by_library: tuple[pd.DataFrame, pd.DataFrame]
) -> None:
    """Negative control: verdicts of s -> -s, and verdicts that call the axis stable."""
    mirrored = {
        degree: [[c * (-1) ** i for i, c in enumerate(p)] for p in listed]
        for degree, listed in polynomials.items()
    }
    wrong, _, _ = disagreements(mirrored, by_library[0])
    assert len(wrong) > 100
    points = by_library[0].copy()
    points.loc[points["max_real"].abs() < 1e-9, "verdict"] = "ok"
    wrong, _, _ = disagreements(polynomials, points)
    assert len(wrong) > 20


@pytest.mark.parametrize(
    ("coefficients", "right", "stable"),
    [
        ([1, 18, 77, 1385], 0, True),
        ([1, 18, 77, 1387], 2, False),
        # An entry of the first column vanishes, with no zero row.
        ([1, 2, 3, 6, 5, 3], 2, False),
        # A zero row: even part and odd part share the factor s^4 + 1.
        (multiply([1, 0, 0, 0, 1], [1, 1]), 2, False),
        ([1, 0, 0, 0, 1], 2, False),
        (multiply([1, -3], [1, -4], [1, 5]), 2, False),
    ],
)
def test_exact_counts_of_roots_known_beforehand(
    coefficients: list[int], right: int, stable: bool
) -> None:
    p = [Fraction(c) for c in coefficients]
    assert not has_root_on_axis(p)
    assert roots_right(p) == right
    assert routh_says_stable(p) == stable
    assert sum(np.roots(coefficients).real > 0) == right


@pytest.mark.parametrize(
    "coefficients",
    [[1, 18, 77, 1386], [1, 0], [1, 0, 4], multiply([1, 0, 2], [1, 0, 2], [1, 3]), [1, 3, 0]],
)
def test_roots_on_the_axis_are_found_exactly(coefficients: list[int]) -> None:
    p = [Fraction(c) for c in coefficients]
    assert has_root_on_axis(p)
    assert not routh_says_stable(p)
