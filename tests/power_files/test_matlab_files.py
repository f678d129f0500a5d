"""MATLAB files: structs, cells, logical codes, objects; version 7.3 with its reversed axes; GNU Octave's own."""

import shutil
import struct
import subprocess
import zlib

import h5py
import numpy as np
import pytest
import scipy.io

import tfstats as tfs
from tfstats.power_files import names_in_file
from tfstats.power_files.stored_values import LazyPower

NAMES = {
    "power": "dat.pow", "frequencies": "dat.f", "times": "dat.t", "channels": "dat.label", "subject": "who",
    "trials.memory": "dat.ok", "trials.side": "dat.side",
}  # fmt: skip
AXES = ["channel", "frequency", "time", "trial"]
SIDES = ["left", "right", "left", "left", "right"]


def cells(texts):
    made = np.empty((1, len(texts)), dtype=object)
    made[0] = texts
    return made


class Matlab73:
    """Writes HDF5 as MATLAB 7.3 does: reversed axes, types in attributes, cells as references."""

    def __init__(self, path):
        self.file = h5py.File(path, "w", userblock_size=512)
        self.count = 0

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.file.close()

    def number(self, place, value, kind="double"):
        array = np.atleast_2d(np.asarray(value))
        dataset = self.file.create_dataset(place, data=array.T)
        dataset.attrs["MATLAB_class"] = np.bytes_(kind)
        return dataset

    def text(self, place, text):
        dataset = self.number(place, np.array([[ord(letter) for letter in text]], dtype=np.uint16), "char")
        dataset.attrs["MATLAB_int_decode"] = 2
        return dataset

    def empty(self, place, kind="double"):
        dataset = self.file.create_dataset(place, data=np.array([0, 0], dtype=np.uint64))
        dataset.attrs["MATLAB_class"], dataset.attrs["MATLAB_empty"] = np.bytes_(kind), np.uint8(1)
        return dataset

    def cell(self, place, values):
        references = np.empty((len(values), 1), dtype=h5py.ref_dtype)
        for number, value in enumerate(values):
            self.count += 1
            inner = f"#refs#/{self.count}"
            made = self.text(inner, value) if isinstance(value, str) and value else (
                self.empty(inner, "char") if isinstance(value, str) else self.number(inner, value)
            )  # fmt: skip
            references[number, 0] = made.ref
        dataset = self.file.create_dataset(place, data=references, dtype=h5py.ref_dtype)
        dataset.attrs["MATLAB_class"] = np.bytes_("cell")
        return dataset

    def object(self, place, kind):
        dataset = self.file.create_dataset(place, data=np.array([[3707764736, 2, 1, 1, 1, 1]], dtype=np.uint32))
        dataset.attrs["MATLAB_class"], dataset.attrs["MATLAB_object_decode"] = np.bytes_(kind), np.int32(3)
        return dataset

    def struct(self, place):
        self.file.create_group(place).attrs["MATLAB_class"] = np.bytes_("struct")


def write_v5(path, power, **more):
    dat = {
        "pow": power.values.transpose(1, 2, 3, 0), "f": power.frequencies, "t": power.times * 1000,
        "label": cells(["C0", "C1"]), "ok": np.array([[True, False, True, True, False]]), "side": cells(SIDES), **more,
    }  # fmt: skip
    scipy.io.savemat(path, {"dat": dat, "who": "S1"})


def write_v73(path, power):
    with Matlab73(path) as mat:
        mat.struct("dat")
        mat.number(
            "dat/pow", power.values.transpose(1, 2, 3, 0), "single" if power.values.dtype == np.float32 else "double"
        )
        mat.number("dat/f", power.frequencies)
        mat.number("dat/t", power.times * 1000)
        mat.cell("dat/label", ["C0", "C1"])
        mat.number("dat/ok", np.array([1, 0, 1, 1, 0], dtype=np.uint8), "logical")
        mat.cell("dat/side", SIDES)
        mat.text("who", "S1")
        mat.empty("nothing")


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("write", [write_v5, write_v73])
@pytest.mark.parametrize("axes", [AXES, None])
def test_structs_trials_last_milliseconds_logical_codes(tmp_path, make_power, write, axes, dtype):
    power = make_power(dtype=dtype)
    write(tmp_path / "s01.mat", power)
    read = tfs.read_power(tmp_path / "s01.mat", names=NAMES, axes=axes, time_unit="ms")
    assert read.subject == "S1" and read.channels == ("C0", "C1") and read.values.dtype == dtype
    np.testing.assert_array_equal(read.as_array(), power.values)
    np.testing.assert_allclose(read.times, power.times)
    assert read.select(trials={"memory": "1"}).trials["side"].tolist() == ["left", "left", "left"]
    coded = tfs.read_power(
        tmp_path / "s01.mat", names=NAMES, time_unit="ms", recode={"memory": {"1": "recalled", "0": "missed"}}
    )
    assert coded.trials["memory"].tolist() == ["recalled", "missed", "recalled", "recalled", "missed"]


def test_version_73_stays_in_its_file_and_is_read_along_its_slowest_axis(tmp_path, make_power):
    power = make_power()
    write_v73(tmp_path / "s01.mat", power)
    read = tfs.read_power(tmp_path / "s01.mat", names=NAMES, time_unit="ms")
    assert isinstance(read.values, LazyPower)
    assert read.values.storage_order == (0, 3, 2, 1)  # trials last in MATLAB are the slowest axis of the file


def test_character_matrices_and_single_texts(tmp_path, make_power):
    power = make_power()
    write_v5(tmp_path / "a.mat", power, label=np.array(["C0 ", "C10"]))
    assert tfs.read_power(tmp_path / "a.mat", names=NAMES, time_unit="ms").channels == ("C0", "C10")
    with Matlab73(tmp_path / "b.mat") as mat:
        mat.number("power", power.values[:, :1])
        mat.number("frequencies", power.frequencies)
        mat.number("times", power.times)
        mat.text("channels", "Fz")
    assert tfs.read_power(tmp_path / "b.mat").channels == ("Fz",)
    with Matlab73(tmp_path / "c.mat") as mat:
        mat.number("power", power.values)
        mat.number("frequencies", power.frequencies)
        mat.number("times", power.times)
        mat.number("channels", np.array([[ord(c) for c in name] for name in ("C0 ", "C10")], dtype=np.uint16), "char")
    assert tfs.read_power(tmp_path / "c.mat").channels == ("C0", "C10")


@pytest.mark.parametrize("version", ["5", "7.3"])
def test_a_struct_array_with_one_element_a_trial(tmp_path, make_power, version):
    power = make_power()
    path = tmp_path / "a.mat"
    if version == "5":
        trials = np.zeros((1, 5), dtype=[("memory", object), ("load", object)])
        trials["memory"][0], trials["load"][0] = SIDES, [1.0, 2.0, 3.0, 1.0, 2.0]
        parts = {"frequencies": power.frequencies, "times": power.times, "channels": cells(["C0", "C1"])}
        scipy.io.savemat(path, {"power": power.values, "trials": trials, **parts})
    else:
        with Matlab73(path) as mat:
            mat.number("power", power.values)
            mat.number("frequencies", power.frequencies)
            mat.number("times", power.times)
            mat.cell("channels", ["C0", "C1"])
            mat.struct("trials")
            for name, values in (("memory", SIDES), ("load", [1.0, 2.0, 3.0, 1.0, 2.0])):
                dataset = mat.cell(f"trials/{name}", values)
                del dataset.attrs["MATLAB_class"]
    read = tfs.read_power(path)
    assert read.trials["memory"].tolist() == SIDES and read.trials["load"].tolist() == [1.0, 2.0, 3.0, 1.0, 2.0]


def test_cells_with_an_empty_text_are_missing(tmp_path, make_power):
    power = make_power()
    write_v5(tmp_path / "a.mat", power, side=cells(["left", "", "left", "right", "left"]))
    read = tfs.read_power(tmp_path / "a.mat", names=NAMES, time_unit="ms")
    assert read.trials["side"].isna().tolist() == [False, True, False, False, False]


def test_complex_version_73(tmp_path, make_power):
    power = make_power()
    stored = np.empty(power.values.shape, dtype=[("real", "<f8"), ("imag", "<f8")])
    stored["real"], stored["imag"] = np.sqrt(power.values), 0.5
    with Matlab73(tmp_path / "a.mat") as mat:
        mat.number("power", stored)
        mat.number("frequencies", power.frequencies)
        mat.number("times", power.times)
        mat.cell("channels", ["C0", "C1"])
    read = tfs.read_power(tmp_path / "a.mat", contents="complex")
    np.testing.assert_allclose(read.as_array(), power.values + 0.25)


def opaque(name, kind):
    """A MATLAB object as version 5 files hold it: class 17, name, type system, class, content."""

    def element(code, data):
        if 0 < len(data) <= 4:  # short ones lie inside their tag
            return struct.pack("<HH", code, len(data)) + data.ljust(4, b"\0")
        return struct.pack("<II", code, len(data)) + data + b"\0" * (-len(data) % 8)

    def matrix(flags, *parts):
        body = element(6, struct.pack("<II", flags, 0)) + b"".join(parts)
        return struct.pack("<II", 14, len(body)) + body

    numbers = matrix(
        13, element(5, struct.pack("<ii", 6, 1)), element(1, b""), element(6, struct.pack("<6I", *range(6)))
    )
    return matrix(17, element(1, name.encode()), element(1, b"MCOS"), element(1, kind.encode()), numbers)


@pytest.mark.parametrize("packed", [False, True])
@pytest.mark.parametrize("kind", ["string", "table"])
def test_objects_in_version_5(tmp_path, make_power, kind, packed):
    power = make_power()
    path = tmp_path / "a.mat"
    parts = {"power": power.values, "frequencies": power.frequencies, "times": power.times}
    scipy.io.savemat(path, parts)
    for name, one in (("channels", kind), ("later", "datetime")):
        variable = opaque(name, one)
        if packed:
            variable = zlib.compress(variable)
            variable = struct.pack("<II", 15, len(variable)) + variable
        path.write_bytes(path.read_bytes() + variable)
    with pytest.raises(tfs.InputError, match=f"a.mat, channels: .* a MATLAB {kind} object; in MATLAB run: S = load"):
        tfs.read_power(path)
    named = tfs.read_power(path, channels=["C0", "C1"])  # the rest of the file is fine
    np.testing.assert_array_equal(named.as_array(), power.values)
    assert names_in_file(path)["later"] == ((), "unreadable")


@pytest.mark.parametrize("kind", ["string", "table", "categorical", "containers.Map"])
def test_objects_in_version_73(tmp_path, make_power, kind):
    power = make_power()
    with Matlab73(tmp_path / "a.mat") as mat:
        mat.number("power", power.values)
        mat.number("frequencies", power.frequencies)
        mat.number("times", power.times)
        mat.object("channels", kind)
    with pytest.raises(tfs.InputError, match=f"a MATLAB {kind} object; in MATLAB run: S = load"):
        tfs.read_power(tmp_path / "a.mat")
    assert names_in_file(tmp_path / "a.mat")["channels"] == ((), "unreadable")


OCTAVE = """
pow = reshape((1:120) / 7, [2 3 4 5]);
dat.pow = pow; dat.label = {'C0', 'C1'}; dat.f = [2 4 8]; dat.t = [-100 0 100 200];
dat.ok = logical([1 0 1 1 0]); dat.side = {'left', 'right', 'left', 'left', 'right'};
dat.complex = complex(sqrt(pow), 0);
who = 'S1';
save('-v7', 'v7.mat', 'dat', 'who'); save('-v6', 'v6.mat', 'dat', 'who'); save('-hdf5', 'o.h5', 'dat', 'who');
single_pow = single(pow); save('-hdf5', 's.h5', 'single_pow', 'dat', 'who');
"""


@pytest.mark.skipif(
    shutil.which("octave-cli") is None and shutil.which("octave") is None, reason="GNU Octave is absent"
)
def test_files_of_gnu_octave(tmp_path):
    program = shutil.which("octave-cli") or shutil.which("octave")
    done = subprocess.run(
        [program, "--no-gui", "--quiet", "--no-init-file", "--eval", OCTAVE],
        cwd=tmp_path, capture_output=True, text=True, timeout=120,
    )  # fmt: skip
    if not (tmp_path / "s.h5").exists():
        pytest.fail(done.stderr)
    expected = np.reshape(np.arange(1, 121) / 7, (2, 3, 4, 5), order="F").transpose(3, 0, 1, 2)
    for name in ("v7.mat", "v6.mat", "o.h5"):
        read = tfs.read_power(tmp_path / name, names=NAMES, time_unit="ms", axes=AXES)
        np.testing.assert_array_equal(read.as_array(), expected)
        assert read.channels == ("C0", "C1") and read.subject == "S1" and read.times.tolist() == [-0.1, 0.0, 0.1, 0.2]
        assert read.trials["side"].tolist() == SIDES
        assert read.select(trials={"memory": "0"}).as_array().shape == (2, 2, 3, 4)
        again = tfs.read_power(
            tmp_path / name, names={**NAMES, "power": "dat.complex"}, time_unit="ms", axes=AXES, contents="complex"
        )
        np.testing.assert_allclose(again.as_array(), expected)
    read = tfs.read_power(tmp_path / "s.h5", names={**NAMES, "power": "single_pow"}, time_unit="ms", axes=AXES)
    assert read.values.dtype == np.float32 and read.values.storage_order[0] == 0
    np.testing.assert_array_equal(read.as_array(), expected.astype(np.float32))
