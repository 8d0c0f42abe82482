"""The species table: what ships, what a person may write, and what is refused."""

import tomllib
from pathlib import Path

import numpy as np
import pytest

import recon
from recon.errors import InputError
from recon.physics.spins import time_signal
from recon.species_table import (
    BUILT_IN,
    SpinSpecies,
    built_in_species,
    load_species_folder,
    species_named,
)

LARMOR_100_MT = 4.2577e6

PROTONS = {
    # non-exchanging protons of the molecule, counted from its structural formula
    "water": 2, "lactate": 4, "creatine": 5, "choline": 13, "N-acetylaspartate": 7, "taurine": 4,
    "glutamate": 5, "glutamine": 7, "alpha-glucose": 7, "beta-glucose": 7, "alanine": 4,
    "acetate": 3, "citrate": 4, "carnosine": 9, "glycogen": 7, "triglyceride": 104,
    "trimethyl-phosphate": 9, "myo-inositol": 6, "glycine": 2, "phosphocreatine": 5,
}  # fmt: skip

GOOD = """
name = "lactate"
reference = "DSS"
temperature_C = 37.0
[sources]
memory = "from memory"
[diffusion]
value_um2_per_ms = 0.16
temperature_C = 37.0
medium = "inside cells"
source = "memory"
[[groups]]
name = "lactate"
spins = [
  { name = "H2", shift_ppm = 4.0974, source = "memory" },
  { name = "CH3", count = 3, shift_ppm = 1.3142, source = "memory" },
]
couplings = [
  { between = ["H2", "CH3"], J_Hz = 6.933, source = "memory" },
]
"""

COUPLING = '  { between = ["H2", "CH3"], J_Hz = 6.933, source = "memory" },\n'
OTHER_WAY = COUPLING.replace('"H2", "CH3"', '"CH3", "H2"')


def strong_lines(species, larmor=LARMOR_100_MT):
    lines = species.lines(larmor)
    return lines.frequencies[lines.intensities > 0.02 * lines.intensities.max()]


@pytest.fixture
def write(tmp_path):
    def writer(text, name="mine.toml"):
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return path

    return writer


# what ships


def test_every_species_ships_with_its_protons():
    assert {name: species.protons for name, species in built_in_species().items()} == PROTONS


@pytest.mark.parametrize("name", PROTONS)
def test_intensities_add_up_to_the_protons_of_the_molecule(name):
    species = species_named(name)
    lines = species.lines(LARMOR_100_MT)
    assert lines.total == pytest.approx(PROTONS[name], rel=2e-6)
    assert (lines.intensities > 0).all()
    assert np.isfinite(time_signal(lines, np.arange(64) * 1e-3, 0.1)).all()


@pytest.mark.parametrize("path", sorted(BUILT_IN.glob("*.toml")), ids=lambda path: path.stem)
def test_files_are_named_after_their_species_and_say_where_numbers_come_from(path):
    data = tomllib.loads(path.read_text(encoding="utf-8"))
    assert data["name"] == path.stem
    assert all(text.startswith(("from memory", "estimate")) for text in data["sources"].values())
    assert path.is_relative_to(Path(recon.__path__[0]))


def test_readme_lists_every_species_and_its_recipe_is_valid(write):
    readme = (BUILT_IN.parents[2] / "datasets" / "README.md").read_text(encoding="utf-8")
    for name, protons in PROTONS.items():
        assert f"| {name} | {protons} |" in readme
    recipe = readme.split("```toml")[1].split("```")[0]
    assert SpinSpecies.from_toml(write(recipe)).protons == 4


def test_trimethyl_phosphate_is_one_doublet_of_its_phosphorus_coupling():
    lines = species_named("trimethyl-phosphate").lines(LARMOR_100_MT)
    assert len(lines) == 2
    assert np.diff(lines.frequencies) == pytest.approx(11.0, abs=1e-6)


def test_lactate_at_100_mt_is_strongly_coupled():
    """Δν/J = 1.7 at 0.1 T, so far more than the six first-order lines are seen."""
    (group,) = species_named("lactate").groups
    spins = group.system()
    ratio = np.ptp(spins.frequencies(LARMOR_100_MT, 4.7)) / spins.couplings[0, 1]
    assert ratio == pytest.approx(1.71, abs=0.01)
    assert len(strong_lines(species_named("lactate"))) > 10


def test_lactate_and_lipid_methylene_part_by_coupling_and_not_by_shift():
    lactate, fat = species_named("lactate"), species_named("triglyceride")
    methyl = lactate.groups[0].spins[1].shift_ppm
    (chain,) = fat.group_lines(LARMOR_100_MT)["methylene"].frequencies
    apart = (methyl - 4.70) * 1e-6 * LARMOR_100_MT - chain
    assert apart == pytest.approx(0.0605, abs=5e-4)
    assert np.abs(strong_lines(lactate) - chain).min() > 10 * apart


def test_glucose_anomers_differ_as_their_first_couplings_do():
    """At 14 T H1 is first-order: a doublet of 3.8 Hz (alpha) and 8.0 Hz (beta)."""
    for name, shift, coupling in (("alpha-glucose", 5.216, 3.8), ("beta-glucose", 4.630, 8.0)):
        lines = species_named(name).lines(600e6, shift)
        signed = lines.frequencies * (np.abs(lines.frequencies) < 30)
        upper = np.average(signed, weights=lines.intensities * (signed > 0))
        lower = np.average(signed, weights=lines.intensities * (signed < 0))
        assert upper - lower == pytest.approx(coupling, abs=0.15)


def test_groups_add_up_to_the_molecule():
    fat = species_named("triglyceride")
    groups = fat.group_lines(LARMOR_100_MT)
    assert [round(lines.total) for lines in groups.values()] == [21, 30, 18, 30, 5]
    times = np.arange(50) * 2e-3
    total = sum(time_signal(lines, times) for lines in groups.values())
    np.testing.assert_allclose(time_signal(fat.lines(LARMOR_100_MT), times), total, atol=1e-9)


def test_water_moves_with_temperature():
    water = species_named("water")
    warm, cool = (water.lines(1e6, 0.0, temperature_C=t).frequencies[0] for t in (37.0, 25.0))
    assert warm == pytest.approx(4.63)
    assert cool - warm == pytest.approx(12 * 0.0103)
    assert cool == pytest.approx(7.83 - 298.15 / 96.9, abs=0.01)
    assert water.diffusion_coefficient == pytest.approx(2.3e-9)


# what a person may write


def test_a_species_survives_writing_and_reading(tmp_path):
    for species in built_in_species().values():
        species.to_toml(tmp_path / "again.toml")
        assert SpinSpecies.from_toml(tmp_path / "again.toml") == species
        assert SpinSpecies.from_json(species.to_json()) == species


def test_a_coupling_may_be_given_in_both_orders(write):
    species = SpinSpecies.from_toml(write(GOOD.replace(COUPLING, COUPLING + OTHER_WAY)))
    assert species.groups[0].system().couplings[0, 1] == 6.933


def test_decay_times_of_spins_reach_the_lines(write):
    text = GOOD.replace('"CH3", count = 3,', '"CH3", count = 3, t2_ms = 100.0,')
    lines = SpinSpecies.from_toml(write(text)).lines(600e6)
    upfield = lines.frequencies < -1000
    np.testing.assert_allclose(lines.decay_rates[upfield], 10.0, rtol=1e-3)
    np.testing.assert_allclose(lines.decay_rates[~upfield], 0.0, atol=0.01)


def test_a_folder_is_a_table(write, tmp_path):
    write(GOOD)
    table = load_species_folder(tmp_path)
    assert species_named("lactate", table) is table["lactate"]
    write(GOOD, "twice.toml")
    with pytest.raises(InputError, match=r"twice\.toml: a second species is called lactate"):
        load_species_folder(tmp_path)


# mistakes


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (COUPLING, COUPLING + OTHER_WAY.replace("6.933", "7.1"),
         "group lactate: coupling table: not symmetric: H2–CH3 is 6.933 Hz, CH3–H2 7.1 Hz"),
        (COUPLING, COUPLING * 2, "H2–CH3 is given twice"),
        ('J_Hz = 6.933, source = "memory"', "J_Hz = 6.933", "'source' is missing"),
        ('shift_ppm = 4.0974, source = "memory"', "shift_ppm = 4.0974", "'source' is missing"),
        ('source = "memory" },\n]\ncoup', 'source = "mem" },\n]\ncoup',
         "spin CH3: source 'mem' is not listed"),
        ('memory = "from memory"', 'memory = " "', "sources, memory"),
        ('memory = "from memory"', 'memory = "from memory"\nother = "x"',
         "source 'other' is listed but no number names it"),
        ('"H2", "CH3"', '"H2", "CH"', "unknown spin 'CH'; did you mean 'CH3'"),
        ('"H2", "CH3"', '"H2", "H2"', "spin H2 is coupled to itself"),
        ("4.0974", "nan", "finite"),
        ("6.933", "inf", "finite"),
        ("shift_ppm = 4.0974, ", "", "spin H2 needs shift_ppm"),
        ("shift_ppm = 4.0974", 'shift_ppm = "4.0974"', "must be a number"),
        ("shift_ppm = 4.0974", "shift_pm = 4.0974", "did you mean 'shift_ppm'"),
        ("count = 3", "count = 0", "count"),
        ("count = 3", "count = 2.5", "count"),
        ("count = 3", 't2_ms = 0.0', "t2_ms"),
        ("count = 3", 'nucleus = "14N"', "nucleus"),
        ('reference = "DSS"', 'reference = "H2O"', "reference"),
        ("value_um2_per_ms = 0.16", "value_um2_per_ms = 0.0", "value_um2_per_ms"),
        ('medium = "inside cells"\n', "", "'medium' is missing"),
        ('[[groups]]\nname = "lactate"', "[[groups]]", "'name' is missing"),
        ("37.0\n[sources]", "-300.0\n[sources]", "temperature_C"),
        ('name = "lactate"\nref', 'name = "a/b"\nref', "name: must be one printable line"),
    ],
)  # fmt: skip
def test_a_faulty_file_gives_one_line_that_names_it(write, old, new, message):
    assert GOOD.count(old) == 1
    with pytest.raises(InputError) as caught:
        SpinSpecies.from_toml(write(GOOD.replace(old, new)))
    line = str(caught.value)
    assert message in line
    assert "mine.toml" in line
    assert "\n" not in line


@pytest.mark.parametrize(
    ("spins", "message"),
    [
        ("[]", "spins: needs at least one entry"),
        ('[{ name = "A", shift_ppm = 1.0, source = "memory" }, '
         '{ name = "A", shift_ppm = 2.0, source = "memory" }]', "the name A is used twice"),
        ('[{ name = "P", nucleus = "31P", source = "memory" }]', "has no proton"),
    ],
)  # fmt: skip
def test_a_group_needs_different_spins_and_a_proton(write, spins, message):
    with pytest.raises(InputError, match=message) as caught:
        SpinSpecies.from_toml(write(f"{GOOD.partition('spins = [')[0]}spins = {spins}\n"))
    assert "\n" not in str(caught.value)


def test_two_mistakes_give_two_lines(write):
    text = GOOD.replace("4.0974", "nan").replace("6.933", "nan")
    with pytest.raises(InputError) as caught:
        SpinSpecies.from_toml(write(text))
    assert len(str(caught.value).splitlines()) == 2


def test_a_group_of_more_than_twelve_coupled_spins_is_refused(write):
    spins = [f'{{ name = "H{k}", shift_ppm = {k}.0, source = "memory" }}' for k in range(13)]
    pairs = [
        f'{{ between = ["H{k}", "H{k + 1}"], J_Hz = 7.0, source = "memory" }}' for k in range(12)
    ]
    head = GOOD.partition("spins = [")[0]
    text = f"{head}spins = [{', '.join(spins)}]\ncouplings = [{', '.join(pairs)}]\n"
    with pytest.raises(InputError, match="12 spins"):
        SpinSpecies.from_toml(write(text))


def test_unknown_species_and_empty_folders_are_named(tmp_path):
    with pytest.raises(InputError, match="unknown species 'lactat'; did you mean 'lactate'"):
        species_named("lactat")
    with pytest.raises(InputError, match="holds no species"):
        load_species_folder(tmp_path)
    with pytest.raises(InputError, match="cannot be read"):
        SpinSpecies.from_toml(tmp_path / "absent.toml")
