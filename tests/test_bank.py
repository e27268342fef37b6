"""The bank in memory: checks of shapes and names, void points, digests."""

import numpy as np
import pytest

from ssaudit.bank import MatrixDigest, chunks_of
from ssaudit.bank_arrays import build_bank
from ssaudit.bank_checks import check_shapes, default_names
from ssaudit.errors import BankError

RNG = np.random.default_rng(20)
A = RNG.standard_normal((6, 3, 3))
B = RNG.standard_normal((6, 3, 2))


def bank(**changes):
    given = {
        "A": A,
        "B": B,
        "revision": "R1",
        "ids": list("abcdef"),
        "coordinates": {"speed": (np.arange(6.0), "m/s")},
        "tags": {"gear": ["in", "in", "in", "out", "out", "out"]},
    }
    return build_bank(**{**given, **changes})


def test_names_are_completed_and_all_points_are_usable():
    section = bank().sections[0]
    assert section.states == ("x1", "x2", "x3")
    assert section.inputs == ("u1", "u2")
    assert section.outputs == ()
    assert bank().usable == 6


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"A": A[0]}, "A has shape (3, 3), not (points, rows, columns)"),
        ({"B": B[:4]}, "B has 4 points, A has 6"),
        ({"A": A[:, :2]}, "A is 2x3 where 2x2 fits"),
        ({"B": B.transpose(0, 2, 1)}, "B is 2x3 where 3x3 fits"),
        ({"C": np.zeros((6, 1, 3)), "D": np.zeros((6, 2, 2))}, "D is 2x2 where 1x2 fits"),
        ({"states": ["a", "b"]}, "2 names of states for 3 states"),
        ({"states": ["a", "b", "a"]}, "states names 'a' twice"),
        ({"ids": ["a"]}, "ids has shape (1,), A has 6 points"),
        ({"tags": {"gear": ["in"]}}, "gear has shape (1,), A has 6 points"),
    ],
)
def test_what_does_not_fit_is_said_with_both_sizes(changes, words):
    with pytest.raises(BankError) as caught:
        bank(**changes)
    assert words in str(caught.value)


def test_no_state_matrix():
    with pytest.raises(BankError, match="A is missing"):
        check_shapes({}, None, None, None)


def test_entries_that_are_no_numbers_make_their_point_void_alone():
    damaged = A.copy()
    damaged[1, 0, 2] = np.nan
    damaged[4, 2, 1] = -np.inf
    void = bank(A=damaged).points.void.tolist()
    assert void == ["", "A[1,3] is NaN", "", "", "A[3,2] is infinite", ""]


def test_coordinates_that_are_no_numbers_make_their_point_void():
    speed = np.array([0, 1, np.inf, 3, 4, 5])
    void = bank(coordinates={"speed": (speed, "m/s")}).points.void.tolist()
    assert void == ["", "", "coordinate speed is not a finite number", "", "", ""]


def test_all_claimants_of_an_id_or_a_place_are_void():
    twice = bank(ids=["a", "b", "c", "a", "e", "f"]).points.void.tolist()
    used = "its id is used by 2 points of the export"
    assert twice == [used, "", "", used, "", ""]
    speed = np.array([1.0, 2, 2, 2, 5, -0.0])
    same = bank(coordinates={"speed": (speed, "m/s")}).points.void.tolist()
    # The third of the equal speeds has another tag, and so another place.
    reason = "its coordinates are those of 2 points of the export"
    assert same == ["", reason, reason, "", "", ""]


def test_zero_and_minus_zero_are_one_place():
    speed = np.array([0.0, -0.0, 2, 3, 4, 5])
    void = bank(coordinates={"speed": (speed, "m/s")}, tags=None).points.void
    assert (void != "").tolist() == [True, True, False, False, False, False]


def test_counting_of_claims_agrees_with_a_direct_count():
    for _ in range(50):
        speed = RNG.integers(0, 4, 30).astype(float)
        mass = RNG.integers(0, 3, 30).astype(float)
        ids = RNG.integers(0, 60, 30).astype(str)
        points = build_bank(
            np.ones((30, 1, 1)),
            revision="R",
            ids=list(ids),
            coordinates={"speed": (speed, ""), "mass": (mass, "")},
        ).points
        place = list(zip(speed, mass, strict=True))
        expected = [list(ids).count(ids[k]) > 1 or place.count(place[k]) > 1 for k in range(30)]
        assert (points.void != "").tolist() == expected


def test_a_bank_of_no_points():
    empty = build_bank(np.zeros((0, 2, 2)), revision="R")
    assert len(empty) == 0
    assert empty.usable == 0
    assert len(empty.digest) == 64


def test_the_digest_tells_every_content_apart():
    digests = {
        bank().digest,
        bank(revision="R2").digest,
        bank(ids=list("abcdeg")).digest,
        bank(A=A + np.spacing(A)).digest,
        bank(B=None).digest,
        bank(dt=0.01).digest,
        bank(digits=5).digest,
        bank(states=["a", "b", "c"]).digest,
        bank(tags=None).digest,
        bank(coordinates={"speed": (np.arange(6.0), "kt")}).digest,
        bank(coordinates={"mass": (np.arange(6.0), "m/s")}).digest,
    }
    # The name of a coordinate counts through its unit's key.
    assert len(digests) == 11
    assert bank().digest == bank().digest


def test_the_digest_does_not_depend_on_chunks():
    whole, parts = MatrixDigest(), MatrixDigest()
    section = bank().sections[0]
    whole.update(section.read(0, 6))
    for _, matrices in chunks_of(section, points=4):
        parts.update(matrices)
    assert whole.hexdigests() == parts.hexdigests()


def test_names_for_signals_without():
    assert default_names("u", 3) == ("u1", "u2", "u3")
