"""Loop files and gain tables: what they say is what is used, and mistakes are named."""

import itertools
import random
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from ssaudit.errors import LoopError
from ssaudit.loop.files import read_gain_table, read_loop
from ssaudit.loop.gains import ConstantGain, GainSchedule

Write = Callable[[str, str], Path]

TABLE = """speed,mass,K:flap:heave,K:flap:pitch,K:rudder:heave,K:rudder:pitch
10,1,1,2,3,4
10,2,5,6,7,8
20,1,9,10,11,12
20,2,13,14,15,16
"""
LOOP = """sign = "negative"
feed = "outputs"
[gain]
table = "tables/gains.csv"
variables = ["speed", "mass"]
outside = "hold"
"""


@pytest.fixture
def write(tmp_path: Path) -> Write:
    def put(name: str, text: str) -> Path:
        path = tmp_path / name
        path.parent.mkdir(exist_ok=True)
        path.write_text(text, encoding="utf-8")
        return path

    return put


def failure(read: Callable[[], object]) -> str:
    with pytest.raises(LoopError) as caught:
        read()
    message = str(caught.value)
    assert "\n" not in message
    return message


def table_failure(write: Write, text: str, variables: tuple[str, ...] = ("speed", "mass")) -> str:
    path = write("gains.csv", text)
    message = failure(lambda: read_gain_table(path, variables, "hold"))
    assert message.startswith(f"{path}: ")
    return message.removeprefix(f"{path}: ")


def loop_failure(write: Write, text: str) -> str:
    path = write("loop.toml", text)
    message = failure(lambda: read_loop(path))
    assert message.startswith(str(path))
    return message.removeprefix(str(path))


def test_constant_matrix_is_read_as_it_stands(write: Write) -> None:
    loop = read_loop(
        write(
            "loop.toml",
            'sign = "positive"\nfeed = "states"\n[gain]\nmatrix = [[1, 2.5], [-3e-4, 0]]\n',
        )
    )
    assert (loop.sign, loop.feed, loop.formula) == ("positive", "states", "u = +K states")
    assert isinstance(loop.gain, ConstantGain)
    np.testing.assert_array_equal(loop.gain.matrix, [[1, 2.5], [-3e-4, 0]])
    assert loop.gain.inputs is None


def test_named_matrix_keeps_its_names(write: Write) -> None:
    loop = read_loop(
        write(
            "loop.toml",
            'sign = "negative"\n[gain]\nmatrix = [[1, 2]]\n'
            'inputs = ["flap"]\nsignals = ["pitch", "heave"]\nunnamed = "zero"\n',
        )
    )
    assert loop.feed == "states"
    assert isinstance(loop.gain, ConstantGain)
    assert (loop.gain.inputs, loop.gain.signals) == (("flap",), ("pitch", "heave"))
    assert loop.gain.unnamed == "zero"


def test_models_that_come_closed_need_no_sign_and_no_gain(write: Write) -> None:
    loop = read_loop(write("loop.toml", 'feed = "none"\n'))
    assert loop.gain is None
    assert loop.formula == "models as exported (closed already)"


def test_table_lies_relative_to_the_loop_file(write: Write) -> None:
    write("tables/gains.csv", TABLE)
    loop = read_loop(write("loop.toml", LOOP))
    assert isinstance(loop.gain, GainSchedule)
    assert loop.gain.variables == ("speed", "mass")
    assert loop.gain.outside == "hold"
    np.testing.assert_array_equal(loop.gain.breakpoints[0], [10, 20])
    np.testing.assert_array_equal(loop.gain.breakpoints[1], [1, 2])
    np.testing.assert_array_equal(
        loop.gain.gains.reshape(4, 2, 2), np.arange(1.0, 17.0).reshape(4, 2, 2)
    )


def test_rows_of_a_table_may_stand_in_any_order(write: Write) -> None:
    header, *rows = TABLE.splitlines()
    expected = read_gain_table(write("gains.csv", TABLE), ("speed", "mass"), "hold")
    for order in itertools.permutations(rows):
        found = read_gain_table(
            write("gains.csv", "\n".join([header, *order])), ("speed", "mass"), "hold"
        )
        assert found.description == expected.description


def test_columns_of_a_table_may_stand_in_any_order(write: Write) -> None:
    rows = [line.split(",") for line in TABLE.splitlines()]
    expected = read_gain_table(write("gains.csv", TABLE), ("speed", "mass"), "hold")
    shuffler = random.Random(0)
    for _ in range(10):
        order = shuffler.sample(range(6), 6)
        text = "\n".join(",".join(row[i] for i in order) for row in rows)
        found = read_gain_table(write("gains.csv", text), ("speed", "mass"), "hold")
        for i, name in enumerate(expected.inputs):
            for s, signal in enumerate(expected.signals):
                np.testing.assert_array_equal(
                    found.gains[..., found.inputs.index(name), found.signals.index(signal)],
                    expected.gains[..., i, s],
                )


def test_order_of_the_variables_is_that_of_the_loop(write: Write) -> None:
    path = write("gains.csv", TABLE)
    found = read_gain_table(path, ("mass", "speed"), "hold")
    other = read_gain_table(path, ("speed", "mass"), "hold")
    np.testing.assert_array_equal(found.gains, other.gains.swapaxes(0, 1))


def test_table_as_spreadsheets_write_it(write: Write) -> None:
    """A byte-order mark, carriage returns, spaces and empty lines."""
    text = "\ufeff" + TABLE.replace("\n", "\r\n").replace("10,1,1", " 10 ,1, 1") + "\r\n,,,,,\r\n"
    found = read_gain_table(write("gains.csv", text), ("speed", "mass"), "hold")
    assert found.gains[0, 0, 0, 0] == 1


def test_single_breakpoint_and_single_variable(write: Write) -> None:
    found = read_gain_table(write("gains.csv", "speed,K:u:x\n12,0.5\n"), ("speed",), "refuse")
    assert found.gains.shape == (1, 1, 1)
    assert found.at({"speed": np.array([12.0])}, 1).K[0, 0, 0] == 0.5


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("10,2,5", "10,1,5", "the breakpoint at speed=10, mass=2 is missing"),
        ("20,2,13,14,15,16\n", "", "the breakpoint at speed=20, mass=2 is missing"),
        ("20,2,13", "20,2,0,0,0,0\n20,2,13", "the breakpoint at speed=20, mass=2 stands twice"),
        ("K:flap:pitch", "K:flap:heave", "column 'K:flap:heave' stands twice"),
        ("speed", "velocity", "column 'velocity' is neither a variable nor K:<input>:<signal>"),
        ("K:rudder:pitch", "K:rudder", "column 'K:rudder' is not K:<input>:<signal>"),
        ("K:rudder:pitch", "K:rudder:yaw", "column K:rudder:yaw is missing"),
        ("20,1,9", "20,1,nan", "breakpoint 3, column 'K:flap:heave': 'nan' is not a finite number"),
        ("20,1,9", "20,1,9e999", "column 'K:flap:heave': '9e999' is not a finite number"),
        ("20,1,9", "20,1,", "column 'K:flap:heave': '' is not a finite number"),
        ("20,1,9", "20,1,=9", "column 'K:flap:heave': '=9' is not a finite number"),
        ("20,1,9", "fast,1,9", "breakpoint 3, column 'speed': 'fast' is not a finite number"),
        ("20,1,9", "20,1,9,9", "breakpoint 3 has 7 cells, the header 6"),
    ],
)
def test_mistake_in_a_table_is_named_with_its_place(
    old: str, new: str, message: str, write: Write
) -> None:
    told = table_failure(write, TABLE.replace(old, new))
    if "K:rudder:yaw" in new:
        # The table then names a signal for one input only; either gap may be told.
        assert "is missing" in told
        assert "give a zero where there is no gain" in told
    else:
        assert message in told


def test_table_without_breakpoints_gains_or_a_variable(write: Write) -> None:
    header = TABLE.splitlines()[0]
    assert table_failure(write, header) == "holds no breakpoints"
    assert table_failure(write, "") == "holds no breakpoints"
    assert "no column K:<input>:<signal>" in table_failure(write, "speed,mass\n1,2\n")
    told = table_failure(write, TABLE.replace("mass", "K:a:b"))
    assert "column 'mass' is missing" in told


def test_sparse_grid_is_refused_at_once(write: Write) -> None:
    """Breakpoints on a diagonal would span a grid of 10^13 cells."""
    header = "a,b,c,d,K:u:x\n"
    rows = "".join(f"{k},{k},{k},{k},1\n" for k in range(1800))
    told = table_failure(write, header + rows, ("a", "b", "c", "d"))
    assert "breakpoints cannot fill the grid" in told


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", ": sign is missing"),
        ('sign = "negativ"\n[gain]\nmatrix = [[1]]', "sign is 'negativ'"),
        ('sign = "negative"', ": gain is missing"),
        ('sign = "negative"\nfed = "states"\n[gain]\nmatrix = [[1]]', "unknown key 'fed'"),
        ('sign = "negative"\nfeed = "output"\n[gain]\nmatrix = [[1]]', "did you mean outputs?"),
        ('feed = "none"\n[gain]\nmatrix = [[1]]', 'feed = "none" takes no gain'),
        ('sign = "negative"\n[gain]\nmatirx = [[1]]', "unknown key 'matirx'; did you mean matrix?"),
        ('sign = "negative"\n[gain]\n', "neither matrix nor table is given"),
        ('sign = "negative"\n[gain]\nmatrix = [[1, nan]]', "nan, not a finite number"),
        ('sign = "negative"\n[gain]\nmatrix = [[1, "2"]]', "'2', not a finite number"),
        ('sign = "negative"\n[gain]\nmatrix = [[1, true]]', "True, not a finite number"),
        ('sign = "negative"\n[gain]\nmatrix = [[1, 2], [3]]', "rows of matrix differ in length"),
        ('sign = "negative"\n[gain]\nmatrix = [1, 2]', "matrix is not a list of rows"),
        ('sign = "negative"\n[gain]\nmatrix = []', "matrix is not a list of rows"),
        ('sign = "negative"\n[gain]\nmatrix = [[1]]\ninputs = ["a", "b"]', "2 are named"),
        ('sign = "negative"\n[gain]\ntable = "t.csv"\noutside = "hold"', "variables is missing"),
        ('sign = "negative"\n[gain]\ntable = "t.csv"\nvariables = ["v"]', "outside is missing"),
        ('sign = "negative"\n[gain\n', "is not TOML"),
    ],
)
def test_mistake_in_a_loop_file_is_named(text: str, message: str, write: Write) -> None:
    assert message in loop_failure(write, text)


def test_outside_is_never_guessed(write: Write) -> None:
    write("tables/gains.csv", TABLE)
    told = loop_failure(write, LOOP.replace('"hold"', '"extend"'))
    assert "outside is 'extend'" in told
    assert '"refuse"' in told


def test_files_that_are_not_there(write: Write, tmp_path: Path) -> None:
    assert "loop.toml: cannot be read" in failure(lambda: read_loop(tmp_path / "loop.toml"))
    told = failure(lambda: read_loop(write("loop.toml", LOOP)))
    assert "gains.csv: cannot be read" in told


def test_table_that_is_no_text(tmp_path: Path) -> None:
    path = tmp_path / "gains.csv"
    path.write_bytes(b"speed,K:u:x\n\xff\xfe,1\n")
    assert "is not a CSV table" in failure(lambda: read_gain_table(path, ("speed",), "hold"))
