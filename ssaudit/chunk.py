"""One chunk of an audit: close, find the modes, judge, settle, prove; then the columns."""

from collections.abc import Container, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, Points, Section
from ssaudit.columns import Columns, Words, loop_columns, mode_columns, point_columns
from ssaudit.criteria import CROSS_CHECK, STABILITY, Criteria
from ssaudit.judging import DOUBT, LOST, VOID, Judgement, judge
from ssaudit.loop.closing import ClosedModels
from ssaudit.loop.model import SIGNS, Loop
from ssaudit.modes.entry_errors import closed_loop_entry_error, rounding_error
from ssaudit.modes.hidden import NO, UNKNOWN, YES
from ssaudit.modes.neutral import neutral_states
from ssaudit.modes.stacked import find_usable_modes
from ssaudit.outside import seen_from_outside
from ssaudit.settling import apply_proofs, settle

if TYPE_CHECKING:
    from ssaudit.distances import Distances

Floats = NDArray[np.float64]
DEPTHS = ("poles", "modes", "margins")
PROVE = ("doubt", "worst", "all")


@dataclass(frozen=True, eq=False)
class Settings:
    """What every chunk of an audit is audited by.

    Attributes
    ----------
    loop : Loop
        How the models are closed.
    criteria : Criteria
        What they are judged by.
    depth : str
        "poles", "modes" or "margins".
    real_radius : bool
        Whether depth margins finds the radii for real changes too.
    prove : str or container of int
        Which points to prove: "" none, "doubt" those in doubt, "all", or places in the bank.
    """

    loop: Loop
    criteria: Criteria
    depth: str = "modes"
    prove: str | Container[int] = ""
    real_radius: bool = False


@dataclass(frozen=True, eq=False)
class Part:
    """Audited points of one chunk, column by column.

    Attributes
    ----------
    points : dict of (points,) arrays
        A row a point; columns as in the ledger.
    modes : dict of (modes,) arrays
        A row a mode, conjugate pairs once; ``row`` is the point's row in ``points``.
    values, shortfall : (points, requirements) float
        Worst value of each requirement's quantity, and how far it is beyond the limit.
    missed : (points, requirements) bool
        Which requirements are missed.
    loops : dict of (loops,) arrays
        A row a single loop at depth margins, ``row`` as of the modes; empty at other depths.
    """

    points: Columns
    modes: Columns
    values: Floats
    shortfall: Floats
    missed: NDArray[np.bool_]
    loops: Columns


def named_rows(part: Part, table: Columns) -> Columns:
    """Columns of a part's modes or loops with the points' names in place of row numbers.

    Parameters
    ----------
    part : Part
        The part.
    table : dict of arrays
        Its ``modes`` or its ``loops``.

    Returns
    -------
    dict of arrays
    """
    columns = {
        name: column.column if isinstance(column, Words) else column
        for name, column in table.items()
    }
    row = columns.pop("row")
    of_point = {name: part.points[name][row] for name in ("point", "revision")}
    return {**of_point, **columns}


def audit_chunk(
    revision: str,
    section: Section,
    points: Points,
    matrices: Matrices,
    settings: Settings,
    offset: int = 0,
) -> Part:
    """Audit some points of one section.

    Parameters
    ----------
    revision : str
        Name of the model revision.
    section : Section
        Names and sampling time.
    points : Points
        The points.
    matrices : dict of (points, rows, columns) float
        Their matrices.
    settings : Settings
        What to audit by.
    offset : int
        Place of the first of them in the bank.

    Returns
    -------
    Part
    """
    closed = settings.loop.close(section, points, matrices)
    chunk = _Chunk(section, matrices, closed, settings)
    deep = settings.depth != "poles"
    E = chunk.mass
    modes, failed = find_usable_modes(
        closed.A,
        closed.void == "",
        chunk.entry_error if deep else None,
        E=E,
        mass_error=None if E is None else chunk.mass_error(E),
        dt=closed.dt,
        neutral=chunk.neutral,
        vectors=deep,
    )
    if modes.unsolved is not None:
        unsolved = failed & (closed.void == "")
        closed.void[unsolved] = modes.unsolved[unsolved]
    distances = chunk.distances() if settings.depth == "margins" else None
    judgement = judge(modes, points, closed.void, settings.criteria, distances)
    if E is None:
        judgement = settle(judgement, modes, closed.A, chunk.entry_error, neutral=chunk.neutral)
    outcomes = chunk.prove(_rows_to_prove(settings.prove, judgement, offset))
    judgement = apply_proofs(judgement, outcomes)
    columns = point_columns(revision, points, closed, modes, judgement, settings.criteria)
    columns |= chunk.both_answers(judgement, deep)
    if distances is not None:
        columns |= {**distances.quantities, **distances.places}
    if settings.prove:
        columns["proof"] = np.full(len(points), "", dtype=object)
        for row, (outcome, _) in outcomes.items():
            columns["proof"][row] = outcome
    return Part(
        columns,
        mode_columns(closed, modes),
        judgement.value,
        judgement.shortfall,
        judgement.missed,
        loop_columns(distances),
    )


def _rows_to_prove(
    prove: str | Container[int], judgement: Judgement, offset: int
) -> NDArray[np.int64]:
    judged = judgement.verdict != VOID
    if prove == "all":
        return np.flatnonzero(judged)
    if prove == "doubt":
        # A proof of stability cannot settle doubt about a requirement.
        return np.flatnonzero((judgement.verdict == DOUBT) & ~_only_short(judgement))
    if not prove or isinstance(prove, str):
        return np.zeros(0, dtype=np.int64)
    chosen = [row for row in np.flatnonzero(judged) if int(row) + offset in prove]
    return np.array(chosen, dtype=np.int64)


@dataclass(frozen=True, eq=False)
class _Chunk:
    """What is asked again about some rows of a chunk: errors, proofs, behaviour from outside."""

    section: Section
    matrices: Matrices
    closed: ClosedModels
    settings: Settings

    @property
    def neutral(self) -> list[int]:
        """States that the criteria exempt, by number."""
        named = self.settings.criteria.neutral
        return [i for i, name in enumerate(self.closed.states) if name in named]

    @property
    def mass(self) -> Floats | None:
        """E of descriptor models; states of parts and compensators have a one of their own."""
        E = self.matrices.get("E")
        if E is None or E.shape[1] == len(self.closed.states):
            return E
        whole = np.tile(np.eye(len(self.closed.states)), (len(E), 1, 1))
        whole[:, : E.shape[1], : E.shape[1]] = E
        return whole

    @property
    def feed(self) -> Any:
        plain = self.closed.open is None and self.settings.loop.feed == "states"
        return "states" if plain else "outputs"

    @property
    def digits(self) -> int | None:
        """Digits of the parts; assembled models carry their rounding as errors."""
        return self.section.digits if self.closed.open is None else None

    @property
    def sign(self) -> int:
        return SIGNS.get(self.settings.loop.sign, -1)

    def parts(self, rows: NDArray[np.int64]) -> dict[str, Floats]:
        """Matrices and gains of some rows; D only where the loop feeds outputs back."""
        K, opened = self.closed.K, self.closed.open
        needed = {"none": "A", "states": "AB", "outputs": "ABCD"}[self.settings.loop.feed]
        if opened is not None:
            parts = {name: getattr(opened, name)[rows] for name in "ABCD"}
        else:
            parts = {name: self.matrices[name][rows] for name in needed}
        if K is not None:
            parts["K"] = np.broadcast_to(K, (len(self.closed.A), *K.shape[1:]))[rows]
        return parts

    def errors(self, rows: NDArray[np.int64], parts: Mapping[str, Floats]) -> dict[str, Floats]:
        """How far these may be off, besides the digits."""
        loop, opened = self.settings.loop, self.closed.open
        if opened is None:
            plain = {name: M for name, M in parts.items() if name != "K"}
            return loop.errors(self.section, plain, parts.get("K"))
        return {
            **loop.errors(self.section, {}, parts["K"]),
            **{name: error[rows] for name, error in opened.errors.items()},
        }

    def mass_error(self, E: Floats) -> Floats:
        """How far the entries of E may be off."""
        n = len(self.section.states)
        error, own = np.zeros(E.shape), E[:, :n, :n]
        stated = self.settings.loop.errors(self.section, {"E": own}, None)
        error[:, :n, :n] += stated.get("E", 0.0)
        if self.section.digits is not None:
            error[:, :n, :n] += rounding_error(own, self.section.digits)
        return error

    def entry_error(self, rows: NDArray[np.int64]) -> Floats | None:
        """How far the closed matrices may be off, by rounding of export and closing, and as stated.

        Returns
        -------
        (rows, n, n) float or None
            None: not at all.
        """
        parts = self.parts(rows)
        errors, digits = self.errors(rows, parts), self.digits
        # Void points may hold NaN or infinity; what comes of them is not used.
        with np.errstate(all="ignore"):
            if "K" not in parts:
                if digits is None and not errors:
                    return None
                rounding = 0.0 if digits is None else rounding_error(parts["A"], digits)
                return np.asarray(rounding + errors.get("A", 0.0))
            return closed_loop_entry_error(
                parts["A"],
                parts["B"],
                parts.get("C"),
                parts.get("D"),
                parts["K"],
                sign=self.sign,
                feed=self.feed,
                digits=digits,
                errors=errors,
            )

    def prove(self, rows: NDArray[np.int64]) -> dict[int, tuple[str, str]]:
        """Prove rows in exact or ball arithmetic, their neutral states left out."""
        if not len(rows):
            return {}
        from ssaudit.modes.proof import prove_points

        outcomes: dict[int, tuple[str, str]] = {}
        named = np.array(self.neutral, dtype=np.int64)
        E = self.mass
        for row in rows:
            one = np.array([row])
            parts = self.parts(one)
            errors = self.errors(one, parts)
            if E is not None:
                parts["E"] = E[one]
                errors["E"] = self.mass_error(E[one])
            kept = ~neutral_states(self.closed.A[one], named, self.closed.dt > 0)[0]
            if E is None and not kept.all():
                parts, errors = (_without(group, kept, self.feed) for group in (parts, errors))
            proof = prove_points(
                [0],
                parts["A"],
                parts.get("B"),
                parts.get("C"),
                parts.get("D"),
                parts.get("K"),
                E=parts.get("E"),
                sign=self.sign,
                feed=self.feed,
                dt=self.closed.dt,
                digits=self.digits,
                errors=errors,
            )[0]
            outcomes[int(row)] = (proof.outcome, proof.how)
        return outcomes

    def distances(self) -> "Distances":
        """Distances to trouble of all rows; NaN at void points and descriptor models."""
        from ssaudit.distances import find_distances

        wanted = self.closed.void == ""
        if self.mass is not None:
            wanted[:] = False
        rows = np.flatnonzero(wanted)
        matrices = {name: M[rows] for name, M in self.matrices.items()}
        asked = any("real_" in r.quantity for r in self.settings.criteria.requirements)
        return find_distances(
            self.settings.loop,
            self.section,
            matrices,
            self.closed.at(rows),
            neutral=self.neutral,
            real_radius=asked or self.settings.real_radius,
        ).spread(rows, len(self.closed.A))

    def both_answers(self, judgement: Judgement, deep: bool) -> Columns:
        """Whether each point is stable inside, and whether it seems so from outside."""
        inside = np.full(len(judgement.verdict), YES, dtype=np.int8)
        inside[judgement.verdict == LOST] = NO
        unsure = (judgement.verdict == VOID) | (judgement.verdict == DOUBT)
        inside[unsure & ~_only_short(judgement)] = UNKNOWN
        outside = inside.copy()
        lost = np.flatnonzero(judgement.verdict == LOST)
        outside[lost] = UNKNOWN
        if deep and len(lost) and self.mass is None and {"B", "C"} <= set(self.matrices):
            parts = self.parts(lost)
            if self.closed.open is None:
                parts = {name: M[lost] for name, M in self.matrices.items()} | parts
            outside[lost] = seen_from_outside(
                self.closed.A[lost],
                parts,
                parts.get("K"),
                sign=self.sign,
                feed=self.feed,
                entry_error=self.entry_error(lost),
                dt=self.closed.dt,
            )
            for row in lost[outside[lost] == YES]:
                judgement.reason[row] += ", hidden: no input and output together show it"
        return {"stable_inside": inside, "stable_outside": outside}


def _only_short(judgement: Judgement) -> NDArray[np.bool_]:
    """Where the doubt is about a requirement, and stability is not in doubt."""
    about = judgement.doubt
    return np.asarray((about != "") & (about != STABILITY) & (about != CROSS_CHECK))


def _without(parts: Mapping[str, Floats], kept: NDArray[np.bool_], feed: str) -> dict[str, Floats]:
    """Leave states out of matrices and gains."""
    cut = dict(parts)
    for name in parts:
        if name in "AB":
            cut[name] = cut[name][:, kept]
        if name in "AC" or (name == "K" and feed == "states"):
            cut[name] = cut[name][:, :, kept]
    return cut
