"""What must not change the findings: orders, chunks, names, and the units of states."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

import ssaudit

Floats = NDArray[np.float64]
POINTS, N = 60, 6
STATES = tuple(f"x{k}" for k in range(N))
INPUTS, OUTPUTS = ("u0", "u1"), ("y0", "y1", "y2")
CRITERIA = ssaudit.Criteria(
    (
        ssaudit.Requirement("ride", "damping_ratio", at_least=0.45, frequency=(0.5, 50.0)),
        ssaudit.Requirement("decay", "real", at_most=-0.4, where={"speed": (10.0, 25.0)}),
        ssaudit.Requirement("pace", "natural_frequency", at_most=8.0),
    )
)
DEPTHS = ("poles", "modes")


def matrices() -> dict[str, Floats]:
    """Models of every verdict: some stable, some not, some void."""
    rng = np.random.default_rng(7)
    shapes = {"A": (N, N), "B": (N, 2), "C": (3, N), "D": (3, 2)}
    found = {name: rng.standard_normal((POINTS, *shape)) for name, shape in shapes.items()}
    shift = rng.uniform(1.5, 5.5, POINTS)
    found["A"] -= shift[:, None, None] * np.eye(N)
    found["D"] *= 0.1
    found["A"][5, 2, 3] = np.nan
    found["B"][40, 0, 0] = np.inf
    return found


def coordinates() -> dict[str, tuple[Floats, str]]:
    rng = np.random.default_rng(8)
    return {
        "speed": (rng.uniform(8.0, 27.0, POINTS), "m/s"),
        "mass": (rng.uniform(90.0, 110.0, POINTS), "t"),
    }


def schedule(
    feed: str, states: Sequence[str] = STATES, scale: Floats | None = None
) -> ssaudit.GainSchedule:
    """Gains on speed and mass; ``scale`` puts the states in other units."""
    rng = np.random.default_rng(9)
    signals = tuple(states) if feed == "states" else OUTPUTS
    gains = 0.2 * rng.standard_normal((3, 2, 2, len(signals)))
    if scale is not None:
        gains = gains / scale
    grid = (np.array([10.0, 17.0, 26.0]), np.array([85.0, 120.0]))
    return ssaudit.GainSchedule(("speed", "mass"), grid, gains, INPUTS, signals, "refuse")


def build(
    stacks: Mapping[str, Floats] | None = None,
    places: Mapping[str, tuple[Floats, str]] | None = None,
    **change: Any,
) -> ssaudit.ModelBank:
    given: dict[str, Any] = {
        **(matrices() if stacks is None else stacks),
        "revision": "A",
        "states": STATES,
        "inputs": INPUTS,
        "outputs": OUTPUTS,
        "ids": [f"p{k}" for k in range(POINTS)],
        "coordinates": coordinates() if places is None else places,
        **change,
    }
    return ssaudit.build_bank(**given)


def audited(
    bank: ssaudit.ModelBank,
    feed: str = "outputs",
    gain: ssaudit.GainSchedule | None = None,
    criteria: ssaudit.Criteria = CRITERIA,
    **options: Any,
) -> ssaudit.Audit:
    loop = ssaudit.Loop("negative", gain or schedule(feed), feed)
    return ssaudit.audit(bank, loop, criteria, **options)


def same(one: pd.DataFrame, other: pd.DataFrame) -> None:
    """Bit for bit, row by row."""
    pd.testing.assert_frame_equal(
        one.reset_index(drop=True), other.reset_index(drop=True), check_exact=True
    )


def by_point(frame: pd.DataFrame) -> pd.DataFrame:
    return frame.sort_values("point", kind="stable").reset_index(drop=True)


def poles(found: ssaudit.Audit) -> dict[str, NDArray[np.complex128]]:
    """Poles of each point by rising real part, then imaginary part."""
    s = found.modes["real"] + 1j * found.modes["imag"]
    return {point: np.sort_complex(values) for point, values in s.groupby(found.modes["point"])}


def close_poles(one: ssaudit.Audit, other: ssaudit.Audit, tolerance: float) -> None:
    first, second = poles(one), poles(other)
    assert first.keys() == second.keys()
    for point, expected in first.items():
        found = second[point]
        assert len(found) == len(expected)
        gap = np.abs(found[:, None] - expected)
        assert gap.min(axis=0).max() <= tolerance * np.abs(expected).max()
        assert gap.min(axis=1).max() <= tolerance * np.abs(expected).max()


def test_the_bank_holds_points_of_every_verdict_but_doubt() -> None:
    for feed in ("states", "outputs"):
        counts = audited(build(), feed).summary.counts
        assert min(counts[verdict] for verdict in ("ok", "short", "lost", "void")) >= 4


@pytest.mark.parametrize("depth", DEPTHS)
@pytest.mark.parametrize("feed", ["states", "outputs"])
def test_chunks_and_workers_change_no_bit(depth: str, feed: str) -> None:
    bank = build()
    whole = audited(bank, feed, depth=depth)
    for chunk in (1, 7, POINTS, 10 * POINTS):
        for workers in (1, 2):
            parts = audited(bank, feed, depth=depth, chunk=chunk, workers=workers)
            same(parts.points, whole.points)
            same(parts.modes, whole.modes)
            assert parts.summary.counts == whole.summary.counts


@pytest.mark.parametrize("depth", DEPTHS)
@pytest.mark.parametrize("feed", ["states", "outputs"])
def test_order_of_points_changes_no_bit(depth: str, feed: str) -> None:
    order = np.random.default_rng(0).permutation(POINTS)
    plain = audited(build(), feed, depth=depth)
    turned = audited(
        build(
            {name: stack[order] for name, stack in matrices().items()},
            {name: (values[order], unit) for name, (values, unit) in coordinates().items()},
            ids=[f"p{k}" for k in order],
        ),
        feed,
        depth=depth,
    )
    same(by_point(turned.points), by_point(plain.points))
    same(by_point(turned.modes), by_point(plain.modes))
    assert turned.summary.counts == plain.summary.counts
    for one, other in zip(turned.summary.missed, plain.summary.missed, strict=True):
        # Of points that miss it equally, the first is named.
        assert (one.name, one.points, one.between) == (other.name, other.points, other.between)
        assert one.worst_value == other.worst_value
    for one, other in zip(turned.summary.worst, plain.summary.worst, strict=True):
        assert one["point"] == other["point"]


@pytest.mark.parametrize("cut", [1, 17, 59])
def test_a_bank_split_in_two_is_audited_like_the_whole(cut: int) -> None:
    whole = audited(build())
    halves = [
        audited(
            build(
                {name: stack[part] for name, stack in matrices().items()},
                {name: (values[part], unit) for name, (values, unit) in coordinates().items()},
                ids=[f"p{k}" for k in range(POINTS)][part],
            )
        )
        for part in (slice(0, cut), slice(cut, None))
    ]
    same(pd.concat([half.points for half in halves]), whole.points)
    same(pd.concat([half.modes for half in halves]), whole.modes)
    for verdict, count in whole.summary.counts.items():
        assert sum(half.summary.counts[verdict] for half in halves) == count


@pytest.mark.parametrize("depth", DEPTHS)
@pytest.mark.parametrize("feed", ["states", "outputs"])
def test_order_of_states_changes_no_verdict(depth: str, feed: str) -> None:
    """The gains go with the names; the poles move by rounding only."""
    order = np.random.default_rng(1).permutation(N)
    stacks = matrices()
    turned = {
        "A": stacks["A"][:, order][:, :, order],
        "B": stacks["B"][:, order],
        "C": stacks["C"][:, :, order],
        "D": stacks["D"],
    }
    plain = audited(build(), feed, depth=depth)
    found = audited(build(turned, states=[STATES[k] for k in order]), feed, depth=depth)
    assert found.points["verdict"].tolist() == plain.points["verdict"].tolist()
    assert found.points["missed"].tolist() == plain.points["missed"].tolist()
    close_poles(plain, found, 1e-12)
    if depth == "modes":
        assert found.points["top_states"].tolist() == plain.points["top_states"].tolist()
        np.testing.assert_allclose(
            found.points["participation_1"], plain.points["participation_1"], rtol=1e-8
        )


@pytest.mark.parametrize("feed", ["states", "outputs"])
def test_order_of_inputs_and_outputs_changes_no_verdict(feed: str) -> None:
    stacks = matrices()
    turned = {
        "A": stacks["A"],
        "B": stacks["B"][:, :, ::-1],
        "C": stacks["C"][:, ::-1],
        "D": stacks["D"][:, ::-1, ::-1],
    }
    plain = audited(build(), feed)
    found = audited(build(turned, inputs=INPUTS[::-1], outputs=OUTPUTS[::-1]), feed)
    assert found.points["verdict"].tolist() == plain.points["verdict"].tolist()
    close_poles(plain, found, 1e-12)


def in_other_units(scale: Floats) -> dict[str, Floats]:
    """The same models, their states multiplied by a scale."""
    stacks = matrices()
    with np.errstate(invalid="ignore"):
        return {
            "A": stacks["A"] * scale[:, None] / scale,
            "B": stacks["B"] * scale[:, None],
            "C": stacks["C"] / scale,
            "D": stacks["D"],
        }


@pytest.mark.parametrize("feed", ["states", "outputs"])
@pytest.mark.parametrize(("depth", "span"), [("poles", 3), ("modes", 3), ("modes", 20)])
def test_units_of_states_that_are_powers_of_two_change_no_verdict(
    depth: str, feed: str, span: int
) -> None:
    scale = 2.0 ** np.random.default_rng(2).integers(-span, span + 1, N)
    plain = audited(build(), feed, depth=depth)
    gain = schedule(feed, scale=scale) if feed == "states" else None
    found = audited(build(in_other_units(scale)), feed, gain, depth=depth)
    assert found.points["verdict"].tolist() == plain.points["verdict"].tolist()
    assert found.points["missed"].tolist() == plain.points["missed"].tolist()
    close_poles(plain, found, 1e-12)
    if depth == "modes":
        assert found.points["top_states"].tolist() == plain.points["top_states"].tolist()
        # The radii too are those of the balanced model, within a small factor.
        ratio = (found.points["radius"] / plain.points["radius"]).dropna()
        assert ratio.between(0.02, 50).all()


def test_units_that_differ_by_far_may_make_the_fast_look_doubt_but_never_turn_a_verdict() -> None:
    """Its radius grows with the largest entry of the matrix, in whatever units."""
    scale = 2.0 ** np.random.default_rng(3).integers(-25, 26, N)
    plain = audited(build(), depth="poles").points["verdict"]
    found = audited(build(in_other_units(scale)), depth="poles").points["verdict"]
    assert (found[found != "doubt"] == plain[found != "doubt"]).all()
    assert (found != "doubt").mean() > 0.5


def test_units_of_inputs_and_outputs_change_no_verdict() -> None:
    force, length = 2.0 ** np.array([11, -7]), 2.0 ** np.array([-5, 3, 8])
    stacks = matrices()
    with np.errstate(invalid="ignore"):
        scaled = {
            "A": stacks["A"],
            "B": stacks["B"] / force,
            "C": length[:, None] * stacks["C"],
            "D": length[:, None] * stacks["D"] / force,
        }
    gain = schedule("outputs")
    gain = replace(gain, gains=force[:, None] * gain.gains / length)
    plain, found = audited(build()), audited(build(scaled), gain=gain)
    assert found.points["verdict"].tolist() == plain.points["verdict"].tolist()
    close_poles(plain, found, 1e-12)


def test_names_of_signals_change_no_number() -> None:
    names = {
        "states": [f"state {k}" for k in "qwerty"],
        "inputs": ["fore flap", "aft flap"],
        "outputs": ["a", "b", "c"],
    }
    gain = replace(
        schedule("states"), inputs=tuple(names["inputs"]), signals=tuple(names["states"])
    )
    plain, found = audited(build(), "states"), audited(build(**names), "states", gain)
    renamed = plain.points.copy()
    for old, new in zip(STATES, names["states"], strict=True):
        renamed["top_states"] = renamed["top_states"].str.replace(old, new)
    # A void point's reason counts rows and columns, and names no signal.
    same(found.points, renamed)
    same(found.modes.drop(columns="top_states"), plain.modes.drop(columns="top_states"))


def test_names_of_points_and_of_the_revision_change_no_number() -> None:
    plain = audited(build())
    found = audited(build(ids=[f"other {k}" for k in range(POINTS)], revision="B"))
    same(
        found.points.drop(columns=["point", "revision"]),
        plain.points.drop(columns=["point", "revision"]),
    )


def test_another_unit_of_a_coordinate_changes_only_the_coordinate() -> None:
    """Speeds in half metres a second: a power of two, in bank, schedule and criteria alike."""
    places = coordinates()
    places["speed"] = (2 * places["speed"][0], "0.5 m/s")
    gain = schedule("outputs")
    gain = replace(gain, breakpoints=(2 * gain.breakpoints[0], gain.breakpoints[1]))
    asked = tuple(
        replace(r, where={k: (2 * v[0], 2 * v[1]) for k, v in r.where.items()})
        for r in CRITERIA.requirements
    )
    plain = audited(build())
    found = audited(build(places=places), gain=gain, criteria=ssaudit.Criteria(asked))
    refused = plain.points["reason"].str.startswith("outside the gain table: speed")
    assert refused.any()
    columns = plain.points.columns.drop(["at_speed", "reason"])
    same(found.points[columns], plain.points[columns])
    assert found.points["reason"][~refused].tolist() == plain.points["reason"][~refused].tolist()
    np.testing.assert_array_equal(found.points["at_speed"], 2 * plain.points["at_speed"])
    same(found.modes, plain.modes)


def test_order_of_requirements_changes_no_verdict() -> None:
    plain = audited(build())
    found = audited(build(), criteria=ssaudit.Criteria(CRITERIA.requirements[::-1]))
    columns = plain.points.columns.drop("missed")
    same(found.points[columns], plain.points[columns])
    for one, other in zip(found.points["missed"], plain.points["missed"], strict=True):
        assert sorted(one.split("; ")) == sorted(other.split("; "))


def test_one_point_is_audited_as_among_others_and_none_is_refused() -> None:
    whole = audited(build())

    def part(points: slice) -> ssaudit.ModelBank:
        return build(
            {name: stack[points] for name, stack in matrices().items()},
            {name: (values[points], unit) for name, (values, unit) in coordinates().items()},
            ids=[f"p{k}" for k in range(POINTS)][points],
        )

    # The sixth point is void: it has a row among the points, and none among the modes.
    for point in (0, 5, 33):
        alone = audited(part(slice(point, point + 1)))
        same(alone.points, whole.points.iloc[[point]])
        modes = whole.modes[whole.modes["point"] == f"p{point}"]
        assert len(alone.modes) == len(modes)
        if len(modes):
            same(alone.modes, modes)
    with pytest.raises(ssaudit.SsauditError, match="bank in memory: holds no points"):
        audited(part(slice(0, 0)))


def test_auditing_changes_neither_bank_nor_loop() -> None:
    bank = build()
    before, loop = bank.compute_digest(), schedule("outputs").description
    gain = schedule("outputs")
    audited(bank, gain=gain)
    assert bank.compute_digest() == before
    assert gain.description == loop
    same(audited(bank, gain=gain).points, audited(build(), gain=gain).points)


def _turned(stacks: dict[str, Floats]) -> None:
    stacks["A"] = stacks["A"].swapaxes(1, 2)
    stacks["A"][:, 0, 1] *= 1.001


def _signed(stacks: dict[str, Floats]) -> None:
    stacks["B"] = -stacks["B"]


@pytest.mark.parametrize("change", [_turned, _signed])
def test_changes_that_matter_are_seen_by_these_comparisons(
    change: Callable[[dict[str, Floats]], None],
) -> None:
    """Negative control: other models do not pass for the same."""
    stacks = matrices()
    change(stacks)
    plain, found = audited(build()), audited(build(stacks))
    with pytest.raises(AssertionError):
        close_poles(plain, found, 1e-12)
    with pytest.raises(AssertionError):
        same(found.points, plain.points)
