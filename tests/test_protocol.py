from dataclasses import fields, replace

import h5py
import numpy as np
import pytest

from recon.protocol import Protocol, SpectralAxis
from tests.descriptions import instrument, line, protocol


def same(one: Protocol, other: Protocol) -> bool:
    pairs = ((getattr(one, f.name), getattr(other, f.name)) for f in fields(Protocol))
    return all(np.array_equal(a, b) for a, b in pairs)


def test_saved_table_comes_back(tmp_path):
    one = replace(protocol(), spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE)
    one.save(tmp_path / "table.h5")
    again = Protocol.load(tmp_path / "table.h5")
    assert same(one, again)
    assert again.spectral_axis is SpectralAxis.EVOLVE_THEN_ENCODE
    assert again.digest() == one.digest()


def test_digest_changes_with_every_field():
    one = protocol()
    changed = [
        replace(one, **{f.name: getattr(one, f.name) + 1})
        for f in fields(Protocol)
        if f.name not in ("spectral_axis", "sensing_axis", "encoding_duration")
    ]
    changed.append(replace(one, sample_times=one.sample_times + 1, encoding_duration=0.5))
    changed.append(replace(one, sensing_axis=one.sensing_axis % 4 + 1))
    changed.append(replace(one, spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE))
    assert len({table.digest() for table in [one, *changed]}) == len(changed) + 1
    assert replace(one).digest() == one.digest()


def test_subset_by_positions_slice_and_mask():
    one = protocol(6)
    part = one.subset([4, 1])
    assert len(part) == 2
    np.testing.assert_array_equal(part.amplitude, one.amplitude[[4, 1]])
    np.testing.assert_array_equal(part.sample_times, one.sample_times)
    assert same(one.subset(slice(1, 3)), one.subset([1, 2]))
    assert same(one.subset(np.arange(6) > 3), one.subset([4, 5]))


def test_arrays_are_copies_and_read_only():
    given = np.zeros((1, 3))
    one = Protocol.plain(given, np.zeros((1, 2)), 1, [0.0])
    given[:] = 7
    assert not one.nuclear_wavevector.any()
    with pytest.raises(ValueError, match="read-only"):
        one.averages[0] = 2


def test_plain_table():
    one = Protocol.plain(np.zeros((3, 3)), np.zeros((3, 2)), 2, [0.0, 1e-3], shot_duration=0.5)
    np.testing.assert_array_equal(one.sensing_axis, [2, 2, 2])
    np.testing.assert_array_equal(one.clock_time, [0, 0.5, 1])
    np.testing.assert_array_equal(one.amplitude, 1)


def changed(name: str, place: object, value: object) -> Protocol:
    one = protocol()
    array = np.array(getattr(one, name))
    array[place] = value
    return replace(one, **{name: array})


@pytest.mark.parametrize(
    ("name", "place", "value", "words"),
    [
        ("sensing_axis", 4, 5, "shot 4 has sensing axis 5"),
        ("sensing_axis", 2, 0, "shot 2 has sensing axis 0"),
        ("averages", 3, 0, "shot 3 has 0 averages"),
        ("nuclear_wavevector", (2, 1), np.nan, "nuclear_wavevector of shot 2 is not finite"),
        ("sensor_wavevector", (5, 0), np.inf, "sensor_wavevector of shot 5 is not finite"),
        ("amplitude", 1, np.nan, "amplitude of shot 1 is not finite"),
        ("clock_time", 0, -np.inf, "clock_time of shot 0 is not finite"),
        ("sample_times", 1, np.nan, "sample_times of sample 1 is not finite"),
        ("sample_times", 1, 0.0, "sample_times must ascend"),
    ],
)
def test_bad_values_name_the_shot(name, place, value, words):
    assert words in line(name, place, value, of=changed)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"nuclear_wavevector": np.zeros((6, 2))}, "nuclear_wavevector has shape (6, 2)"),
        ({"sensor_wavevector": np.zeros((6, 3))}, "sensor_wavevector has shape (6, 3)"),
        ({"averages": np.ones(5)}, "averages has 5 shots, nuclear_wavevector 6"),
        ({"averages": np.full(6, 1.5)}, "averages must hold whole numbers"),
        ({"clock_time": np.ones(6) * 1j}, "clock_time must be real"),
        ({"amplitude": np.array(["a"] * 6)}, "amplitude must hold numbers"),
        ({"sample_times": np.zeros(0)}, "sample_times must ascend"),
        ({"nuclear_wavevector": np.zeros((0, 3))}, "no shots"),
        ({"spectral_axis": "listen"}, "is not a SpectralAxis"),
        ({"reference_shift_ppm": np.nan}, "reference_shift_ppm is not finite"),
    ],
)
def test_bad_tables(changes, words):
    assert words in line(of=lambda: replace(protocol(), **changes))


def test_reach(tmp_path):
    one = protocol()
    apparatus = instrument(tmp_path)
    one.check_reach(apparatus)
    limit = apparatus.nuclear_wavevector_limit
    at_the_limit = np.array(one.nuclear_wavevector)
    at_the_limit[1] = -limit
    replace(one, nuclear_wavevector=at_the_limit).check_reach(apparatus)
    beyond = np.array(one.nuclear_wavevector)
    beyond[3:, 2] = 2.5 * limit[2]
    said = line(apparatus, of=replace(one, nuclear_wavevector=beyond).check_reach)
    assert "shot 3: nuclear wavevector" in said
    assert "along z is 2.5 times the gradient's limit" in said
    beyond = np.array(one.sensor_wavevector)
    beyond[0, 1] = -3 * apparatus.sensor_wavevector_limit[1]
    said = line(apparatus, of=replace(one, sensor_wavevector=beyond).check_reach)
    assert "shot 0: sensor wavevector" in said
    assert "along y is 3 times" in said


def test_reach_without_gradients(tmp_path):
    apparatus = instrument(tmp_path)
    none = apparatus.model_copy(update={"gradients": type(apparatus.gradients)()})
    assert "has no gradient" in line(none, of=protocol().check_reach)


def test_files_that_are_not_tables(tmp_path):
    path = tmp_path / "table.h5"
    protocol().save(path)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    assert "truncated" in line(path, of=Protocol.load)
    path.write_text("text")
    assert "not an HDF5 file" in line(path, of=Protocol.load)
    with h5py.File(path, "w"):
        pass
    assert "without the attribute 'nearspin_kind'" in line(path, of=Protocol.load)
    with h5py.File(path, "w") as file:
        file.attrs["nearspin_kind"] = "record"
    assert "holds a record, not a protocol" in line(path, of=Protocol.load)
    path.write_bytes(whole)
    with h5py.File(path, "r+") as file:
        file.attrs["nearspin_format"] = 99
    assert "format 99" in line(path, of=Protocol.load)
    assert "does not exist" in line(tmp_path / "none.h5", of=Protocol.load)
    assert "is a folder" in line(tmp_path, of=Protocol.load)


@pytest.mark.parametrize(
    ("name", "value", "words"),
    [
        ("sensing_axis", [1, 2, 5, 1, 1, 1], "shot 2 has sensing axis 5"),
        ("averages", None, "field 'averages' is missing"),
    ],
)
def test_damaged_table_names_the_file(tmp_path, name, value, words):
    path = tmp_path / "table.h5"
    protocol().save(path)
    with h5py.File(path, "r+") as file:
        del file[name]
        if value is not None:
            file[name] = value
    said = line(path, of=Protocol.load)
    assert words in said
    assert said.startswith(str(path))


def test_unknown_spectral_axis_in_a_file(tmp_path):
    path = tmp_path / "table.h5"
    protocol().save(path)
    with h5py.File(path, "r+") as file:
        file.attrs["spectral_axis"] = "sideways"
    assert "sideways" in line(path, of=Protocol.load)
