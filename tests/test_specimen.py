import errno

import h5py
import numpy as np
import pytest

from recon.errors import InputError
from recon.specimen import Species, Specimen
from tests.descriptions import GRID, line, run_with_file_limit, species, specimen


def test_saved_specimen_comes_back(tmp_path):
    one = specimen()
    one.save(tmp_path / "muscle.toml")
    again = Specimen.from_toml(tmp_path / "muscle.toml")
    assert again.grid == one.grid
    assert again.species == one.species
    assert again.refinement == (1, 2, 3)
    assert again.notes == "invented"
    assert again.maps.dtype == np.float32
    np.testing.assert_array_equal(again.maps, one.maps)


def test_concentrations_are_block_means():
    one = specimen((1, 2, 3))
    assert one.concentrations.shape == (2, *GRID.shape)
    assert one.concentrations.dtype == np.float32
    expected = one.maps[1, 1, 2:4, 3:6].mean()
    assert one.concentrations[1, 1, 1, 1] == pytest.approx(expected, rel=1e-6)


def test_species_in_si():
    one = species()
    assert one.t2_star == pytest.approx(0.12)
    assert one.t1 == 1.5
    # Self-diffusion of water, 2.3 µm²/ms = 2.3e-9 m²/s.
    assert species(diffusion_um2_per_ms=2.3).diffusion == pytest.approx(2.3e-9)
    assert one.polarisation is None


def test_description_travels_without_maps():
    one = Specimen.from_description_json(specimen().description_json())
    assert one.grid == GRID
    assert one.names == ("lactate", "water")
    assert one.species[1].polarisation == 0.01
    assert one.maps is None
    assert "no map" in line(of=lambda: one.concentrations)


def test_maps_are_read_only():
    with pytest.raises(ValueError, match="read-only"):
        specimen().maps[0, 0, 0, 0] = 1


def test_species_by_name():
    assert specimen().index("water") == 1
    assert "did you mean 'lactate'?" in line("lactat", of=specimen().index)


@pytest.mark.parametrize(
    ("value", "words"), [(np.nan, "not finite"), (np.inf, "not finite"), (-1, "negative")]
)
def test_impossible_concentrations(value, words):
    maps = np.ones((1, *GRID.shape), np.float32)
    maps[0, 1, 2, 3] = value
    said = line(of=lambda: Specimen(GRID, (species(),), maps))
    assert words in said
    assert "lactate" in said


def test_species_without_a_map(tmp_path):
    lines = (species(), species("water"))
    one_map = np.ones((1, *GRID.shape), np.float32)
    said = line(of=lambda: Specimen(GRID, lines, one_map))
    assert said == "specimen: species 'water' has no map"

    specimen().save(tmp_path / "one.toml")
    with h5py.File(tmp_path / "one.h5", "r+") as file:
        del file["concentration_mM/water"]
    said = line(tmp_path / "one.toml", of=Specimen.from_toml)
    assert "species 'water' has no map; maps: lactate" in said

    text = (tmp_path / "one.toml").read_text().replace('maps = "one.h5"', "")
    (tmp_path / "one.toml").write_text(text)
    assert "species 'lactate' has no map" in line(tmp_path / "one.toml", of=Specimen.from_toml)


def test_maps_that_do_not_fit_the_grid(tmp_path):
    specimen().save(tmp_path / "one.toml")
    text = (tmp_path / "one.toml").read_text().replace("shape = [2, 4, 8]", "shape = [2, 3, 8]")
    (tmp_path / "one.toml").write_text(text)
    assert "do not divide into the grid" in line(tmp_path / "one.toml", of=Specimen.from_toml)
    shape = (1, 2, 4, 9)
    assert "shape (1, 2, 4, 9)" in line(
        of=lambda: Specimen(GRID, (species(),), np.ones(shape, np.float32))
    )


def test_mistakes_in_the_file_are_placed(tmp_path):
    specimen().save(tmp_path / "one.toml")
    good = (tmp_path / "one.toml").read_text()
    for old, new, words in [
        ("shift_ppm = 4.7", 'shift_ppm = "4.7"', "species 2, shift_ppm: must be a number"),
        ("t1_s", "t1_ms", "species 1: unknown field 't1_ms'; did you mean 't1_s'?"),
        ("voxel_um = [4.0", "voxel_um = [-4.0", "grid, voxel_um 1: must be greater than 0"),
        ('name = "water"', 'name = "lactate"', "species 'lactate' is listed twice"),
        ('name = "water"', 'name = "../water"', "species 2, name: must be one printable line"),
        ("polarisation = 0.01", "polarisation = 1.5", "species 2, polarisation"),
    ]:
        assert old in good
        (tmp_path / "one.toml").write_text(good.replace(old, new, 1))
        assert words in line(tmp_path / "one.toml", of=Specimen.from_toml)


def test_missing_and_truncated_maps(tmp_path):
    specimen().save(tmp_path / "one.toml")
    maps = tmp_path / "one.h5"
    whole = maps.read_bytes()
    maps.write_bytes(whole[:-100])
    assert "truncated" in line(tmp_path / "one.toml", of=Specimen.from_toml)
    maps.unlink()
    assert "one.h5: does not exist" in line(tmp_path / "one.toml", of=Specimen.from_toml)


def test_full_disk_leaves_both_files_as_they_were(tmp_path, monkeypatch):
    specimen().save(tmp_path / "one.toml")
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}

    def full(*arguments, **options):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(h5py.Group, "create_dataset", full)
    said = line(tmp_path / "one.toml", of=specimen((1, 1, 1)).save)
    assert "No space left on device" in said
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


@pytest.mark.parametrize("limit", [10, 1000, 3000])
def test_disk_really_full(tmp_path, limit):
    code = (
        "from tests.descriptions import specimen\n"
        "from recon.errors import InputError\n"
        "try: specimen().save('one.toml')\n"
        "except InputError as error: print(error)\n"
    )
    done = run_with_file_limit(limit, code, tmp_path)
    assert done.returncode == 0, done.stderr
    assert "cannot write (File too large)" in done.stdout
    assert not list(tmp_path.iterdir())


def test_name_must_end_in_toml(tmp_path):
    with pytest.raises(InputError, match=r"\.toml"):
        specimen().save(tmp_path / "one.h5")


def test_species_fields_are_required():
    assert "field 't1_s' is missing" in line(
        of=lambda: Species(
            name="a", shift_ppm=1, equivalent_nuclei=1, t2_star_ms=1, diffusion_um2_per_ms=1
        )
    )
