import warnings

import numpy as np
import pytest
from scipy import constants

from recon.errors import InputError, InputWarning
from recon.instrument import Gradients, Instrument, SensorLayer
from recon.physics import photons
from recon.toml import toml_text
from tests.descriptions import instrument, instrument_file, line


def test_toml_and_json_come_back_equal(tmp_path):
    one = instrument(tmp_path)
    one.to_toml(tmp_path / "again.toml")
    assert Instrument.from_toml(tmp_path / "again.toml") == one
    assert Instrument.from_json(one.to_json()) == one


def test_properties_are_si(tmp_path):
    one = instrument(tmp_path)
    np.testing.assert_allclose(one.bias_field, [0, 0, 0.085])
    np.testing.assert_allclose(one.bias_direction, [0, 0, 1])
    assert one.temperature == pytest.approx(298.15)
    assert one.depth == pytest.approx(1e-7)
    assert one.thickness == pytest.approx(5e-6)
    assert one.pixel == (4e-6, 4e-6)
    assert one.view == pytest.approx((16e-6, 32e-6))
    assert one.detector.channels() == (4, 8)
    assert one.optics.wavelength == pytest.approx(700e-9)
    # CODATA: 42.577 MHz/T.
    assert one.larmor_frequency == pytest.approx(42.577478461e6 * 0.085, rel=1e-6)


def test_gradient_limits_are_gamma_g_tau(tmp_path):
    one = instrument(tmp_path)
    proton = constants.physical_constants["proton gyromag. ratio"][0]
    electron = constants.physical_constants["electron gyromag. ratio"][0]
    np.testing.assert_allclose(
        one.nuclear_wavevector_limit, proton * 2e-3 * np.array([1, 1, 0.5]), rtol=1e-9
    )
    np.testing.assert_allclose(
        one.sensor_wavevector_limit, electron * 1.0 * 5e-6 * np.ones(2), rtol=1e-9
    )


def test_no_gradients_reach_nothing():
    assert not Gradients().nuclear_wavevector_limit.any()
    assert not Gradients().sensor_wavevector_limit.any()


def test_noise_of_a_complex_sample(tmp_path):
    one = instrument(tmp_path)
    quadrature = photons.field_noise(1e6, 0.02, 20e-6, 0.5)
    assert one.field_noise == pytest.approx(np.sqrt(2) * quadrature / 10)


def test_one_detector_has_one_channel(tmp_path):
    one = Instrument.from_toml(
        instrument_file(tmp_path, "[camera]\npixel_um = 4.0", "[one_detector]")
    )
    assert one.detector.channels() == (1, 1)
    assert one.pixel == one.view == pytest.approx((16e-6, 32e-6))


@pytest.mark.parametrize(
    ("cut", "degrees_to_z"),
    [
        ("100", [54.7356] * 4),
        ("111", [0, 70.5288, 70.5288, 70.5288]),
        ("110", [35.2644, 35.2644, 90, 90]),
    ],
)
@pytest.mark.parametrize("rotation", [0.0, 37.0])
def test_sensing_axes(tmp_path, cut, degrees_to_z, rotation):
    # Tetrahedral bonds: 109.47° between any two (geometry of a cube's diagonals).
    layer = SensorLayer(depth_um=0, thickness_um=1, crystal_cut=cut, in_plane_rotation_deg=rotation)
    directions = instrument(tmp_path).model_copy(update={"sensor_layer": layer}).sensing_directions
    gram = directions @ directions.T
    np.testing.assert_allclose(gram, np.eye(4) * 4 / 3 - 1 / 3, atol=1e-12)
    found = np.degrees(np.arccos(np.clip(np.abs(directions[:, 2]), 0, 1)))
    np.testing.assert_allclose(found, degrees_to_z, atol=1e-3)


@pytest.mark.parametrize("cut", ["100", "111", "110"])
def test_cut_turns_but_does_not_mirror_the_crystal(tmp_path, cut):
    one = instrument(tmp_path)

    def handedness(layer):
        a, b, c, _ = one.model_copy(update={"sensor_layer": layer}).sensing_directions
        return np.linalg.det([a, b, c])

    crystal = np.linalg.det(np.array([[1, 1, 1], [-1, -1, 1], [-1, 1, -1]]) / np.sqrt(3))
    layer = SensorLayer(depth_um=0, thickness_um=1, crystal_cut=cut)
    assert handedness(layer) == pytest.approx(crystal)


def test_in_plane_rotation_turns_x_towards_y(tmp_path):
    one = instrument(tmp_path)
    layer = one.sensor_layer.model_copy(update={"in_plane_rotation_deg": 90.0})
    turned = one.model_copy(update={"sensor_layer": layer})
    x, y, z = one.sensing_direction(2)
    np.testing.assert_allclose(turned.sensing_direction(2), [-y, x, z], atol=1e-12)


@pytest.mark.parametrize("axis", [0, 5, -1])
def test_a_fifth_sensing_axis_is_refused(tmp_path, axis):
    assert f"sensing axis {axis}" in line(axis, of=instrument(tmp_path).sensing_direction)


@pytest.mark.parametrize("field", ["[0.0, 0.0, 102.0]", "[0.0, 0.0, -102.0]"])
def test_level_anticrossing_warns(tmp_path, field):
    # D/γ_e = 2.870 GHz / 28.025 GHz/T = 102.4 mT.
    path = instrument_file(tmp_path, "[0.0, 0.0, 85.0]", field)
    with pytest.warns(InputWarning, match=r"102\.0 mT along sensing axis 1 .* at 102\.4 mT"):
        Instrument.from_toml(path)


@pytest.mark.parametrize(
    "field", ["[0.0, 0.0, 85.0]", "[0.0, 0.0, 104.0]", "[60.0, 0.0, 102.4]", "[0.0, 102.4, 0.0]"]
)
def test_other_fields_do_not_warn(tmp_path, field):
    path = instrument_file(tmp_path, "[0.0, 0.0, 85.0]", field)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        Instrument.from_toml(path)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("depth_um", "dept_um", "sensor_layer: unknown field 'dept_um'; did you mean 'depth_um'?"),
        ("depth_um = 0.1\n", "", "sensor_layer: field 'depth_um' is missing"),
        ("[optics]", "[optic]", "unknown field 'optic'; did you mean 'optics'?"),
        ("thickness_um = 5.0", "thickness_um = -5.0", "thickness_um: must be greater than 0"),
        ("thickness_um = 5.0", 'thickness_um = "5"', "thickness_um: must be a number, not '5'"),
        ("thickness_um = 5.0", "thickness_um = true", "thickness_um: must be a number"),
        ('"111"', '"112"', "crystal_cut: must be '100', '111' or '110', not '112'"),
        ("= 25.0", "= nan", "temperature_C: must be a finite number"),
        ("85.0]", "inf]", "bias_field_mT 3: must be a finite number"),
        ("[0.0, 0.0, 85.0]", "[0.0, 0.0]", "bias_field_mT: number 3 is missing"),
        ("85.0]", "0.0]", "bias_field_mT must not be zero"),
        ("numerical_aperture = 0.8", "numerical_aperture = 1.2", "below refractive_index 1"),
        ("[32.0, 16.0]", "[33.0, 16.0]", "33 is not a whole number of pixels of 4 um"),
        ("pixel_um = 4.0\n", "", "camera: field 'pixel_um' is missing"),
        ("contrast = 0.02", "contrast = 2", "contrast: must be less than or equal to 1, not 2"),
        ("[1000.0, 1000.0, 500.0]", "[1.0, 1.0]", "nuclear_strength_mT_per_m: number 3 is missing"),
        ("[readout]", "[one_detector]\nfield_of_view_um = [1, 1]\n[readout]", "exactly one of"),
        ("= 25.0", "= 25.0.0", "is not valid TOML"),
    ],
)
def test_each_mistake_is_one_line_that_names_it(tmp_path, old, new, words):
    path = instrument_file(tmp_path, old, new)
    said = line(path, of=Instrument.from_toml)
    assert words in said
    assert said.startswith(str(path))


def test_several_mistakes_are_one_line_each(tmp_path):
    path = instrument_file(tmp_path, "depth_um = 0.1\nthickness_um", "thicknes_um")
    with pytest.raises(InputError) as caught:
        Instrument.from_toml(path)
    lines = str(caught.value).splitlines()
    assert len(lines) == 2
    assert all(one.startswith(f"{path}: sensor_layer: ") for one in lines)


def test_a_description_made_in_python_also_says_one_line():
    said = line(of=lambda: SensorLayer(depth_um=1, thickness_um=0, crystal_cut="100"))
    assert said == "SensorLayer: thickness_um: must be greater than 0, not 0"


def test_files_that_cannot_be_read(tmp_path):
    assert "No such file" in line(tmp_path / "none.toml", of=Instrument.from_toml)
    (tmp_path / "latin.toml").write_bytes(b"name = '\xe9'")
    assert "UTF-8" in line(tmp_path / "latin.toml", of=Instrument.from_toml)
    assert "not valid JSON" in line("{", of=Instrument.from_json)


def test_folder_that_cannot_be_written(tmp_path):
    (tmp_path / "file").write_text("a file where a folder is wanted")
    said = line(tmp_path / "file" / "one.toml", of=instrument(tmp_path).to_toml)
    assert "cannot write" in said


def test_toml_text_survives_any_characters():
    import tomllib

    data = {
        "text": 'a "quote", \\ back\tslash\n and µ \x7f \x01 \U0001f600',
        "odd key": [1, 2.5, [True, "x"]],
        "small": 1e-300,
        "section": {"list": [{"a": 1, "inner": {"b": 2}}, {"a": 2}], "empty": []},
    }
    assert tomllib.loads(toml_text(data)) == data
