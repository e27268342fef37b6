"""Exports in the default layout: every point ends in the bank, usable or void with its reason."""

import io
import os
import pickle
import zipfile

import h5py
import numpy as np
import pytest

from ssaudit.bank_file import read_bank
from ssaudit.errors import BankError, SourceError, SsauditError
from ssaudit.intake.ingest import ingest

RNG = np.random.default_rng(31)
N = 12


def export(**changes):
    """Arrays of a small export: three states, two inputs, one output."""
    content = {
        "A": RNG.standard_normal((N, 3, 3)),
        "B": RNG.standard_normal((N, 3, 2)),
        "C": RNG.standard_normal((N, 1, 3)),
        "D": RNG.standard_normal((N, 1, 2)),
        "ids": np.array([f"p{k}" for k in range(N)]),
        "states": np.array(["heave", "heave_rate", "pitch"]),
        "inputs": np.array(["fore", "aft"]),
        "outputs": np.array(["height"]),
        "dt": 0.0,
        "digits": 9,
        "at_speed": np.arange(10.0, 10 + N),
        "at_mode": np.array(["a", "b"] * (N // 2)),
        "units_speed": "m/s",
    }
    content.update(changes)
    return {name: value for name, value in content.items() if value is not None}


def write_npz(path, content):
    np.savez(path, **content)
    return path


def write_hdf5(path, content, **options):
    with h5py.File(path, "w") as file:
        for name, value in content.items():
            value = np.asarray(value)
            if value.dtype.kind == "U":
                value = value.astype(object) if value.ndim else str(value)
            if name.startswith("units_"):
                file[f"points/{name[6:]}"].attrs["units"] = value
            elif name.startswith("at_"):
                file[f"points/{name[3:]}"] = value
            elif name in ("states", "inputs", "outputs", "dt", "digits"):
                file.attrs[name] = value
            else:
                file.create_dataset(name, data=value, **options)
    return path


WRITERS = {"h5": write_hdf5, "npz": write_npz}


@pytest.fixture(params=["h5", "npz"])
def write(request, tmp_path):
    """Write an export in one of the formats and return its path."""
    folder = tmp_path / "exports"
    folder.mkdir()

    def writer(content, name="a"):
        return WRITERS[request.param](folder / f"{name}.{request.param}", content)

    return writer


@pytest.fixture
def take_in(tmp_path):
    """Ingest sources and return the open bank."""

    def taker(*sources, **options):
        target = tmp_path / "bank.h5"
        ingest(sources, revision="R", bank=target, **options)
        return read_bank(target)

    return taker


def message(action, *arguments, **options):
    with pytest.raises(SsauditError) as caught:
        action(*arguments, **options)
    text = str(caught.value)
    assert "\n" not in text
    return text


def test_everything_of_an_export_arrives_to_the_bit(write, take_in):
    content = export()
    with take_in(write(content)) as bank:
        (section,) = bank.sections
        for name in "ABCD":
            np.testing.assert_array_equal(section.read(0, N)[name], content[name])
        assert section.states == ("heave", "heave_rate", "pitch")
        assert section.inputs == ("fore", "aft")
        assert section.outputs == ("height",)
        assert (section.dt, section.digits) == (0.0, 9)
        assert bank.points.ids.tolist() == content["ids"].tolist()
        np.testing.assert_array_equal(bank.points.coordinates["speed"], content["at_speed"])
        assert bank.points.units == {"speed": "m/s"}
        assert bank.points.tags["mode"].tolist() == content["at_mode"].tolist()
        assert bank.usable == N
        assert bank.sources[0].points == N
        assert bank.ids_given


def test_both_formats_give_one_digest(tmp_path):
    content = export()
    digests = {
        ingest(
            [writer(tmp_path / f"a.{suffix}", content)], revision="R", bank=tmp_path / "bank"
        ).digest
        for suffix, writer in WRITERS.items()
    }
    assert len(digests) == 1


def test_only_the_state_matrix_is_needed(write, take_in):
    with take_in(write({"A": export()["A"]})) as bank:
        assert bank.usable == N
        assert bank.sections[0].states == ("x1", "x2", "x3")
        assert bank.points.ids.tolist() == [str(k) for k in range(1, N + 1)]
        assert not bank.ids_given


def test_a_single_matrix_is_one_point_named_by_its_file(write, take_in):
    content = export()
    single = {name: content[name][0] for name in "ABCD"} | {"at_speed": 12.5}
    with take_in(write(single, "V12")) as bank:
        assert bank.points.ids.tolist() == ["V12"]
        assert bank.points.coordinates["speed"].tolist() == [12.5]
        np.testing.assert_array_equal(bank.sections[0].read(0, 1)["B"][0], content["B"][0])


def test_every_way_to_be_void_has_its_reason(write, take_in):
    content = export()
    content["A"][1, 0, 1] = np.nan
    content["D"][2, 0, 1] = np.inf
    content["at_speed"][3] = np.nan
    content["ids"][5] = content["ids"][4]
    content["at_speed"][8], content["at_mode"][8] = content["at_speed"][6], content["at_mode"][6]
    with take_in(write(content)) as bank:
        void = dict(zip(range(N), bank.points.void, strict=True))
        assert {k: reason for k, reason in void.items() if reason} == {
            1: "A[1,2] is NaN",
            2: "D[1,2] is infinite",
            3: "coordinate speed is not a finite number",
            4: "its id is used by 2 points of the export",
            5: "its id is used by 2 points of the export",
            6: "its coordinates are those of 2 points of the export",
            8: "its coordinates are those of 2 points of the export",
        }


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"A": np.zeros((N, 3, 4))}, "A is 3x4 where 3x3 fits 3 states, 2 inputs and 1 outputs"),
        ({"B": np.zeros((N, 2, 3))}, "B is 2x3 where 3x3 fits 3 states, 3 inputs and 1 outputs"),
        ({"A": None}, "A is missing"),
        ({"states": np.array(["a", "b"])}, "2 names of states for 3 states"),
        ({"inputs": np.array(["a", "a"])}, "inputs names 'a' twice"),
        ({"C": np.zeros((N, 3))}, f"C has shape ({N}, 3), not (points, rows, columns)"),
    ],
)
def test_points_of_a_file_that_does_not_fit_are_void_and_the_rest_goes_on(
    write, take_in, changes, reason
):
    bad = write(export(ids=np.array([f"q{k}" for k in range(N)]), **changes), "bad")
    good = write(export(), "good")
    with take_in(bad.parent) as bank:
        assert len(bank) == 2 * N
        assert bank.usable == N
        assert set(bank.points.void[N:]) == {reason}
        assert bank.points.ids[N] == "q0"
    # Alone it is an error that says why.
    assert reason in message(take_in, bad)
    assert good.exists()


def test_lengths_that_differ_are_an_error_of_the_file(write, take_in):
    for changes, words in (
        ({"at_speed": np.zeros(5)}, f"speed has 5 points, A has {N}"),
        ({"B": np.zeros((4, 3, 2))}, f"B has 4 points, A has {N}"),
        ({"ids": np.array(["a"])}, f"ids has 1 points, A has {N}"),
    ):
        path = write(export(**changes))
        assert f"{path}: {words}" in message(take_in, path)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"dt": -1.0}, "dt is -1.0"),
        ({"dt": np.array([1.0, 2.0])}, "dt is not a number"),
        ({"dt": np.nan}, "dt is nan"),
        ({"digits": 0}, "digits is 0"),
        ({"digits": 2.5}, "digits is 2.5"),
        ({"A": np.zeros((N, 3, 3), complex)}, "A holds complex numbers, not real numbers"),
        ({"A": np.zeros((0, 3, 3))}, "has 12 points, A has 0"),
    ],
)
def test_descriptions_that_mean_nothing(write, take_in, changes, words):
    assert words in message(take_in, write(export(**changes)))


def test_files_without_models(write, take_in):
    path = write({"X": np.eye(2)})
    assert "holds no models" in message(take_in, path)
    assert "ssaudit look" in message(take_in, path)


def test_nothing_there(tmp_path, take_in):
    (tmp_path / "empty").mkdir()
    (tmp_path / "zero.npz").write_bytes(b"")
    (tmp_path / "text.h5").write_text("speed,mass\n")
    assert "there is no such file" in message(take_in, tmp_path / "no.h5")
    assert "there is no such file" in message(take_in, tmp_path / "no*.h5")
    assert "holds no HDF5 or NPZ file" in message(take_in, tmp_path / "empty")
    assert "is neither HDF5 nor NPZ" in message(take_in, tmp_path / "zero.npz")
    assert "is neither HDF5 nor NPZ" in message(take_in, tmp_path / "text.h5")
    assert "no source is named" in message(take_in)
    assert "is no regular file" in message(take_in, "/dev/zero")
    assert "there is no such file" in message(take_in, tmp_path / "a\0b")
    os.mkfifo(tmp_path / "pipe.h5")
    assert "is no regular file" in message(take_in, tmp_path / "pipe.h5")
    assert not (tmp_path / "bank.h5").exists()


def test_a_revision_needs_a_name(write, tmp_path):
    with pytest.raises(SourceError, match="the revision has no name; name it: --revision R"):
        ingest([write(export())], revision="", bank=tmp_path / "bank.h5")


def test_the_bank_must_not_be_a_source(write, tmp_path):
    path = write(export())
    before = path.read_bytes()
    link = tmp_path / "link.h5"
    link.hardlink_to(path)
    for target in (path, link):
        with pytest.raises(SourceError, match="is a source and the bank to write"):
            ingest([path], revision="R", bank=target)
    assert path.read_bytes() == before


def test_a_bank_is_no_export(write, tmp_path, take_in):
    take_in(write(export())).close()
    (tmp_path / "bank.h5").rename(tmp_path / "other.h5")
    assert "is a bank, not an export" in message(take_in, tmp_path / "other.h5")


def test_a_truncated_file(write, tmp_path, take_in):
    path = write(export())
    whole = path.read_bytes()
    for part in (0.1, 0.5, 0.9, 0.999):
        path.write_bytes(whole[: int(part * len(whole))])
        text = message(take_in, path)
        assert str(path) in text
    assert not (tmp_path / "bank.h5").exists()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["exports"]


def test_a_pickled_array_is_never_unpickled(tmp_path, take_in):
    class Trap:
        def __reduce__(self):
            return (os.mkdir, (str(tmp_path / "sprung"),))

    block = io.BytesIO()
    np.lib.format.write_array(block, np.array([Trap()], dtype=object), allow_pickle=True)
    with zipfile.ZipFile(tmp_path / "trap.npz", "w") as archive:
        archive.writestr("A.npy", block.getvalue())
    assert "never unpickled" in message(take_in, tmp_path / "trap.npz")
    assert not (tmp_path / "sprung").exists()
    # The trap does spring for whoever does unpickle.
    pickle.loads(pickle.dumps(Trap()))
    assert (tmp_path / "sprung").exists()


def test_an_npz_member_that_claims_more_than_it_holds(tmp_path, take_in):
    block = io.BytesIO()
    header = {"descr": "<f8", "fortran_order": False, "shape": (10**9, 30, 30)}
    np.lib.format.write_array_header_1_0(block, header)
    with zipfile.ZipFile(tmp_path / "claim.npz", "w") as archive:
        archive.writestr("A.npy", block.getvalue() + bytes(800))
    text = message(take_in, tmp_path / "claim.npz")
    assert "claims 7200000000000 bytes and holds 800" in text


def test_hdf5_values_in_other_files_are_refused(tmp_path, take_in):
    other = write_hdf5(tmp_path / "other.h5", export())
    with h5py.File(tmp_path / "linked.h5", "w") as file:
        file["A"] = h5py.ExternalLink(str(other), "A")
    with h5py.File(tmp_path / "virtual.h5", "w") as file:
        layout = h5py.VirtualLayout((N, 3, 3), "f8")
        layout[:] = h5py.VirtualSource(str(other), "A", (N, 3, 3))
        file.create_virtual_dataset("A", layout)
    (tmp_path / "raw.bin").write_bytes(bytes(N * 72))
    with h5py.File(tmp_path / "raw.h5", "w") as file:
        file.create_dataset("A", (N, 3, 3), "f8", external=[(str(tmp_path / "raw.bin"), 0, N * 72)])
    with h5py.File(tmp_path / "points.h5", "w") as file:
        file["A"] = np.ones((N, 3, 3))
        file["points"] = h5py.ExternalLink(str(other), "points")
    assert "is a link into another file" in message(take_in, tmp_path / "linked.h5")
    assert "takes its values from other files" in message(take_in, tmp_path / "virtual.h5")
    assert "takes its values from other files" in message(take_in, tmp_path / "raw.h5")
    assert "is a link into another file" in message(take_in, tmp_path / "points.h5")


def test_an_hdf5_name_that_is_no_text(tmp_path, take_in):
    with h5py.File(tmp_path / "name.h5", "w") as file:
        file["A"] = np.ones((2, 1, 1))
        file.create_group("points").create_dataset(b"sp\xff\xfeed", data=np.arange(2.0))
    assert "holds a name that is not UTF-8" in message(take_in, tmp_path / "name.h5")


def test_an_hdf5_dataset_that_was_never_written(tmp_path, take_in):
    with h5py.File(tmp_path / "claim.h5", "w") as file:
        file.create_dataset("A", (10**9, 30, 30), "f8", chunks=(100, 30, 30))
    assert "holds only a part" in message(take_in, tmp_path / "claim.h5")


def test_hdf5_blocks_beyond_reason(tmp_path, take_in):
    with h5py.File(tmp_path / "blocks.h5", "w") as file:
        file.create_dataset("A", (10**7, 2, 2), "f8", chunks=(10**7, 2, 2), compression="gzip",
                            compression_opts=1)  # fmt: skip
    assert "is stored in blocks of 320000000 bytes" in message(take_in, tmp_path / "blocks.h5")


def test_hdf5_that_begins_with_a_user_block(tmp_path, take_in):
    with h5py.File(tmp_path / "block.mat", "w", userblock_size=512) as file:
        file["A"] = np.ones((1, 2, 2))
    with take_in(tmp_path / "block.mat") as bank:
        assert bank.usable == 1


@pytest.mark.parametrize("options", [{"chunks": (5, 3, 3)}, {"compression": "gzip"}])
def test_hdf5_chunked_and_compressed(tmp_path, take_in, options):
    content = {"A": export()["A"]}
    with take_in(write_hdf5(tmp_path / "a.h5", content, **options)) as bank:
        np.testing.assert_array_equal(bank.sections[0].read(0, N)["A"], content["A"])


def test_npz_compressed_and_column_major(tmp_path, take_in):
    content = export()
    content["A"] = np.asfortranarray(content["A"])
    np.savez_compressed(tmp_path / "a.npz", **content)
    with take_in(tmp_path / "a.npz") as bank:
        np.testing.assert_array_equal(bank.sections[0].read(0, N)["A"], content["A"])


def test_many_batches_are_one_bank(tmp_path, take_in, monkeypatch):
    content = export()
    digests = set()
    for size in (1, 300, 8_000_000):
        monkeypatch.setattr("ssaudit.intake.stacked.BATCH_BYTES", size)
        for suffix, writer in WRITERS.items():
            with take_in(writer(tmp_path / f"a.{suffix}", content)) as bank:
                digests.add(bank.digest)
    assert len(digests) == 1


def test_the_same_names_in_another_order_are_put_in_order(write, take_in):
    content = export()
    order = [2, 0, 1]
    turned = {
        "A": content["A"][:, order][:, :, order],
        "B": content["B"][:, order][:, :, ::-1],
        "C": content["C"][:, :, order],
        "D": content["D"][:, :, ::-1],
        "states": content["states"][order],
        "inputs": content["inputs"][::-1],
        "ids": np.array([f"q{k}" for k in range(N)]),
        "at_speed": content["at_speed"] + 100,
    }
    write(content, "a")
    path = write({**content, **turned}, "b")
    with take_in(path.parent) as bank:
        (section,) = bank.sections
        assert section.states == ("heave", "heave_rate", "pitch")
        for name in "ABCD":
            both = section.read(0, 2 * N)[name]
            np.testing.assert_array_equal(both[N:], both[:N])


def test_other_names_and_other_sizes_are_sections_of_their_own(write, take_in):
    write(export(), "a")
    write(export(states=np.array(["heave", "sink", "pitch"]),
                 ids=np.array([f"q{k}" for k in range(N)])), "b")  # fmt: skip
    path = write({"A": np.ones((2, 2, 2)), "states": np.array(["x", "y"]),
                  "ids": np.array(["r1", "r2"]), "at_speed": np.array([1.0, 2.0]),
                  "at_mode": np.array(["a", "a"]), "units_speed": "m/s"}, "c")  # fmt: skip
    with take_in(path.parent) as bank:
        assert [section.states for section in bank.sections] == [
            ("heave", "heave_rate", "pitch"),
            ("heave", "sink", "pitch"),
            ("x", "y"),
        ]
        assert bank.usable == 2 * N + 2


def test_a_file_without_names_beside_one_with_is_an_error(write, take_in):
    write(export(), "a")
    path = write(export(states=None), "b")
    assert "does not name its states" in message(take_in, path.parent)


def test_a_coordinate_in_two_units_is_an_error(write, take_in):
    write(export(), "a")
    path = write(export(units_speed="kt"), "b")
    text = message(take_in, path.parent)
    assert text.startswith(f"{path}: speed is a coordinate in 'kt', in ")
    assert "a coordinate in 'm/s'" in text


def test_a_coordinate_that_some_files_lack(write, take_in):
    write(export(), "a")
    path = write(export(at_speed=None, units_speed=None,
                        ids=np.array([f"q{k}" for k in range(N)])), "b")  # fmt: skip
    with take_in(path.parent) as bank:
        assert set(bank.points.void[N:]) == {"coordinate speed is missing"}


def test_points_of_many_files_are_numbered_on(write, take_in):
    for name in "abc":
        path = write({"A": RNG.standard_normal((4, 2, 2))}, name)
    with take_in(path.parent) as bank:
        assert bank.points.ids.tolist() == [str(k) for k in range(1, 13)]


def test_no_usable_point_is_an_error_that_says_why(write, take_in):
    text = message(take_in, write({"A": np.full((3, 2, 2), np.nan)}))
    assert "no usable point among 3: A[1,1] is NaN (3 points)" in text


def test_a_place_that_cannot_be_written(write, tmp_path):
    with pytest.raises(BankError, match="cannot be written"):
        ingest([write(export())], revision="R", bank="/proc/nowhere/bank.h5")
    (tmp_path / "folder").mkdir()
    with pytest.raises(BankError, match="is a folder"):
        ingest([write(export())], revision="R", bank=tmp_path / "folder")


def test_progress_is_told_in_bytes(write, tmp_path):
    path = write(export())
    seen = []
    ingest([path], revision="R", bank=tmp_path / "bank.h5",
           progress=lambda *arguments: seen.append(arguments))  # fmt: skip
    size = path.stat().st_size
    assert seen[-1] == ("ingest", size, size)
    assert all(0 <= done <= total == size for _, done, total in seen)


def test_a_point_axis_that_is_last_is_recognised(write, take_in):
    content = {
        "A": RNG.standard_normal((5, 5, 28)),
        "B": RNG.standard_normal((5, 1, 28)),
        "C": RNG.standard_normal((2, 5, 28)),
    }
    text = message(take_in, write({**content, "at_speed": np.arange(28.0)}))
    assert 'the point axis seems to be last (28 points): say points = "last axis"' in text
    assert "ssaudit look" in text
    # Another number of points in one of them is no axis out of place.
    text = message(take_in, write({**content, "at_speed": np.arange(27.0)}))
    assert "export the same points in every array" in text
    assert "last axis" not in text


def test_matrices_of_other_names_are_listed(write, take_in):
    A, B = RNG.standard_normal((4, 2, 2)), RNG.standard_normal((4, 2, 1))
    text = message(take_in, write({"Amat": A, "Bmat": B}))
    assert "it holds Amat, Bmat where arrays A, B, C, D" in text
    assert "ssaudit look" in text
    text = message(take_in, write({"Amat": A, "B": B}))
    assert "A is missing (4 points); held and not used: Amat; say which is A in a layout" in text
    assert "ssaudit look" in text


def test_text_where_numbers_belong(write, take_in):
    text = message(take_in, write({"A": np.full((2, 2, 2), "x")}))
    assert "A holds text, not real numbers" in text


def test_a_file_that_is_named_twice(write, take_in, monkeypatch):
    path = write(export())
    assert f"{path}: is named twice; name it once" in message(take_in, path, path)
    folder = path.parent
    (folder / "within").mkdir()
    other = folder / "within" / ".." / path.name
    assert f"is named twice, by {path} and by {other}" in message(take_in, path, other)
    monkeypatch.chdir(folder)
    assert "is named twice" in message(take_in, path, path.name)
    assert "is named twice" in message(take_in, folder, path)
    link = folder / f"link{path.suffix}"
    link.symlink_to(path)
    assert "is named twice" in message(take_in, path, link)


def test_a_format_that_nothing_reads_is_told_with_those_that_are(tmp_path, take_in):
    for name in ("m.mat", "m.bin"):
        (tmp_path / name).write_bytes(b"\x00\x01" * 200)
        text = message(take_in, tmp_path / name)
        assert "is neither HDF5 nor NPZ; export one of the known formats: hdf5, npz, " in text
    (tmp_path / "t.csv").write_text("a;b\n1;2\n")
    assert "ssaudit look" in message(take_in, tmp_path / "t.csv")
