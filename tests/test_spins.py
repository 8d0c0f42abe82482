"""Spin systems against closed forms, brute force and a general spectrum library."""

import warnings
from math import comb

import numpy as np
import pytest
import scipy.linalg
from nmrsim.qm import qm_spinsystem

from recon.errors import InputError, InputWarning
from recon.physics.spins import LineList, SpinSystem, line_list, time_signal
from recon.physics.spins.composite import composite_choices, composite_spins

MHZ = 1e6  # with this Larmor frequency and reference 0, a shift in ppm is a frequency in Hz
TIMES = np.arange(300) * 2e-3


def system(frequencies, couplings, **more):
    """Spins H0, H1, ... with couplings given as {(k, l): J}."""
    table = np.zeros((len(frequencies),) * 2)
    for (first, second), value in couplings.items():
        table[first, second] = table[second, first] = value
    names = tuple(f"H{number}" for number in range(len(frequencies)))
    return SpinSystem(names, np.array(frequencies, float), table, **more)


def lines_of(spins, **more):
    return line_list(spins, MHZ, 0.0, **more)


def random_system(count, seed, spread=20.0, **more):
    rng = np.random.default_rng(seed)
    pairs = {(k, n): rng.uniform(-15, 15) for k in range(count) for n in range(k)}
    return system(rng.uniform(-spread, spread, count), pairs, **more)


def brute_force(spins, times):
    """<F+>(t) of the full product space, every nucleus a spin ½ of its own, no symmetry used."""
    owner = np.repeat(np.arange(len(spins.names)), spins.counts)
    total = len(owner)
    half = {
        "x": np.array([[0, 1], [1, 0]]) / 2,
        "y": np.array([[0, -1j], [1j, 0]]) / 2,
        "z": np.diag([0.5, -0.5]),
    }

    def one(axis, place):
        return np.kron(np.kron(np.eye(2**place), half[axis]), np.eye(2 ** (total - place - 1)))

    operators = [{axis: one(axis, place) for axis in "xyz"} for place in range(total)]
    frequencies = spins.frequencies(MHZ, 0.0)
    hamiltonian = sum(
        -frequencies[owner[place]] * operators[place]["z"] for place in range(total)
    ).astype(complex)
    for a in range(total):
        for b in range(a):
            k, n = owner[a], owner[b]
            axes = "xyz" if spins.nuclei[k] == spins.nuclei[n] else "z"
            for axis in axes:
                term = operators[a][axis] @ operators[b][axis]
                hamiltonian += spins.couplings[k, n] * term
    seen = [place for place in range(total) if spins.nuclei[owner[place]] == "1H"]
    fx = sum(operators[place]["x"] for place in seen)
    plus = fx + 1j * sum(operators[place]["y"] for place in seen)
    step = scipy.linalg.expm(-2j * np.pi * hamiltonian * (times[1] - times[0]))
    density, signal = fx.astype(complex), []
    for _ in times:
        signal.append(np.trace(plus @ density))
        density = step @ density @ step.conj().T
    return np.array(signal) * 4 / 2**total


# closed forms


@pytest.mark.parametrize("ratio", [0.0, 0.1, 0.5, 1.0, 1.7, 5.0, 30.0])
def test_two_spins_give_the_ab_quartet(ratio):
    """AB closed form: lines at ±(D ± J)/2 with 1 ∓ J/D, D² = Δν² + J² (any NMR text)."""
    coupling, difference = 7.0, 7.0 * ratio
    found = lines_of(system([difference / 2, -difference / 2], {(0, 1): coupling}))
    gap = np.hypot(difference, coupling)
    inner, outer = (gap - coupling) / 2, (gap + coupling) / 2
    strong, weak = (1 + coupling / gap) / 2, (1 - coupling / gap) / 2
    if ratio == 0:
        np.testing.assert_allclose(found.frequencies, [0.0], atol=1e-12)
        np.testing.assert_allclose(found.intensities, [2.0])
    else:
        np.testing.assert_allclose(found.frequencies, [-outer, -inner, inner, outer], atol=1e-9)
        np.testing.assert_allclose(found.intensities, [weak, strong, strong, weak], atol=1e-9)


@pytest.mark.parametrize("neighbours", [1, 2, 3, 6, 9])
def test_high_field_gives_first_order_multiplets(neighbours):
    """n equivalent neighbours split a line into n + 1 with binomial weights (any NMR text)."""
    spins = system([0.0, 1e7], {(0, 1): 7.0}, counts=np.array([1, neighbours]))
    found = lines_of(spins, dropped_fraction=1e-9)
    near = np.abs(found.frequencies) < 1e3
    heights = [comb(neighbours, k) / 2**neighbours for k in range(neighbours + 1)]
    centred = found.frequencies[near] / 7.0
    rounded = np.round(centred + neighbours / 2).astype(int)
    np.testing.assert_allclose(centred + neighbours / 2, rounded, atol=1e-5)
    sums = np.bincount(rounded, found.intensities[near], neighbours + 1)
    np.testing.assert_allclose(sums, heights, atol=1e-6)
    far = found.frequencies[~near] - 1e7
    np.testing.assert_allclose(np.abs(far), 3.5, atol=1e-4)


def test_high_field_keeps_two_different_couplings_apart():
    spins = system([0.0, 1e7, -1e7], {(0, 1): 9.0, (0, 2): 4.0, (1, 2): 2.0})
    found = lines_of(spins, dropped_fraction=1e-9)
    near = np.abs(found.frequencies) < 1e3
    np.testing.assert_allclose(found.frequencies[near], [-6.5, -2.5, 2.5, 6.5], atol=1e-4)
    np.testing.assert_allclose(found.intensities[near], 0.25, atol=1e-4)


def test_zero_field_leaves_one_line_at_the_reference():
    """F+ commutes with every J I·I: nothing but the sum of all protons is left at f = 0."""
    found = line_list(random_system(6, 1), 0.0)
    np.testing.assert_allclose(found.frequencies, [0.0], atol=1e-9)
    np.testing.assert_allclose(found.intensities, [6.0], rtol=1e-6)


def test_coupling_within_one_shift_is_never_seen():
    pairs = {(0, 1): -12.0, (1, 2): 7.0, (0, 2): 3.0, (2, 3): 15.0}
    found = lines_of(system([5.0, 5.0, 5.0, 5.0], pairs))
    np.testing.assert_allclose(found.frequencies, [5.0], atol=1e-9)
    np.testing.assert_allclose(found.intensities, [4.0], rtol=1e-6)


def test_aa_xx_lines_lie_at_their_closed_form():
    """AA'XX' (any NMR text): A lines at ±N/2, ±(K ± √(K²+L²))/2 and ±(M ± √(M²+L²))/2 of ν_A."""
    geminal_a, geminal_x, near, far = -12.0, -13.0, 9.0, 5.0
    pairs = {(0, 1): geminal_a, (2, 3): geminal_x}
    pairs |= {(0, 2): near, (1, 3): near, (0, 3): far, (1, 2): far}
    found = lines_of(system([0, 0, 1e7, 1e7], pairs), dropped_fraction=1e-6)
    lines = found.frequencies[np.abs(found.frequencies) < 1e3]
    both, apart = near + far, near - far
    expected = [both / 2, -both / 2]
    for middle in (geminal_a + geminal_x, geminal_a - geminal_x):
        for sign in (1, -1):
            for root in (1, -1):
                expected.append(sign * (middle + root * np.hypot(middle, apart)) / 2)
    np.testing.assert_allclose(np.unique(np.round(lines, 3)), np.sort(expected), atol=2e-3)


# outside references and brute force


@pytest.mark.parametrize("scale", [0.05, 1.0, 20.0])
@pytest.mark.parametrize("count", [3, 5, 7])
def test_agrees_with_a_general_spectrum_library(count, scale):
    """nmrsim, text-book spectra, solves the whole space; it wants frequencies well above 0."""
    spins = random_system(count, count, spread=10.0 * scale)
    peaks = np.array(
        qm_spinsystem(spins.shifts_ppm + 1000, spins.couplings, cutoff=1e-9, cache=False)
    )
    peaks[:, 0] -= 1000
    other = LineList(*np.array(peaks).T, np.zeros(len(peaks)))
    other = other.scaled(count / other.total)
    mine = lines_of(spins, dropped_fraction=1e-9)
    difference = time_signal(mine, TIMES) - time_signal(other, TIMES)
    assert np.abs(difference).max() < 1e-5 * count


def test_abx_agrees_line_by_line_with_a_general_spectrum_library():
    spins = system([100.0, 109.0, 400.0], {(0, 1): -15.6, (0, 2): 3.9, (1, 2): 9.8})
    peaks = np.array(qm_spinsystem(spins.shifts_ppm, spins.couplings, cutoff=1e-4, cache=False))
    peaks = peaks[np.argsort(peaks[:, 0])]
    mine = lines_of(spins, dropped_fraction=1e-9)
    strong = mine.intensities > 1e-4
    assert strong.sum() == len(peaks) >= 14
    np.testing.assert_allclose(mine.frequencies[strong], peaks[:, 0], atol=1e-6)
    np.testing.assert_allclose(mine.intensities[strong], peaks[:, 1], atol=1e-3)


@pytest.mark.parametrize(
    ("frequencies", "counts", "nuclei", "pairs"),
    [
        ([0.0, 12.0], [1, 3], ["1H", "1H"], {(0, 1): 7.0}),
        ([0.0, 5.0, 9.0], [2, 3, 1], ["1H"] * 3, {(0, 1): 7.0, (1, 2): -4.0}),
        ([0.0, 5.0, 9.0], [2, 2, 2], ["1H"] * 3, {(0, 1): 7.0, (1, 2): 4.0, (0, 2): 1.0}),
        ([0.0, 6.0, 0.0], [1, 2, 1], ["1H", "1H", "31P"], {(0, 1): 7.0, (1, 2): 11.0}),
        ([0.0, 0.0, 6.0], [2, 2, 1], ["1H", "31P", "1H"], {(0, 1): 20.0, (0, 2): 8.0}),
        ([3.0, 1.0, -9.0, 4.0], [2, 1, 1, 1], ["1H", "31P", "31P", "1H"],
         {(0, 1): 11.0, (1, 2): 18.0, (2, 3): 7.0, (0, 3): 5.0}),
        ([0.0, 4.0, 2.0], [1, 1, 1], ["1H", "1H", "15N"], {(0, 2): -90.0, (1, 2): 3.0}),
    ],
)  # fmt: skip
def test_blocks_and_composite_spins_agree_with_brute_force(frequencies, counts, nuclei, pairs):
    spins = system(frequencies, pairs, counts=np.array(counts), nuclei=tuple(nuclei))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", InputWarning)  # J to 15N bends lines at 1 MHz
        mine = time_signal(lines_of(spins), TIMES)
    np.testing.assert_allclose(mine, brute_force(spins, TIMES), atol=2e-5)


def test_composite_methyl_equals_three_explicit_protons():
    joined = system([11.85, 0.0], {(0, 1): 6.933}, counts=np.array([1, 3]))
    pairs = {(0, k): 6.933 for k in (1, 2, 3)} | {(1, 2): -12.0, (1, 3): -12.0, (2, 3): -12.0}
    explicit = system([11.85, 0.0, 0.0, 0.0], pairs)
    a, b = lines_of(joined), lines_of(explicit)
    assert len(a) == len(b)
    np.testing.assert_allclose(a.frequencies, b.frequencies, atol=1e-9)
    np.testing.assert_allclose(a.intensities, b.intensities, atol=1e-9)


@pytest.mark.parametrize("count", [1, 2, 3, 4, 9, 12])
def test_composite_spins_fill_the_space(count):
    assert sum(often * (twice + 1) for twice, often in composite_spins(count)) == 2**count
    assert composite_spins(3) == [(3, 1), (1, 2)]
    assert len(list(composite_choices([3, 2, 1]))) == 4


# sum rules and symmetry


@pytest.mark.parametrize("larmor", [0.0, 1e4, 4.26e6, 6e8])
def test_intensities_add_up_to_the_protons(larmor):
    spins = random_system(5, 3, counts=np.array([1, 3, 2, 1, 2]))
    assert line_list(spins, larmor, dropped_fraction=0.0).total == pytest.approx(9, rel=1e-10)


@pytest.mark.parametrize("larmor", [1e5, 4.26e6, 4e8])
def test_mean_frequency_ignores_the_couplings(larmor):
    """Tr(F− [H, F+]) holds no J, which commutes with F+: Σ a f = Σ count ν."""
    spins = random_system(5, 4, counts=np.array([1, 3, 2, 1, 1]))
    found = line_list(spins, larmor, 0.0, dropped_fraction=0.0)
    shifts = spins.frequencies(larmor, 0.0)
    first = found.intensities @ found.frequencies
    assert first == pytest.approx(spins.counts @ shifts, rel=1e-9)


def test_two_pairs_give_a_spectrum_symmetric_about_its_centre():
    pairs = {(0, 1): -12.4, (0, 2): 6.7, (0, 3): 6.4, (1, 2): 6.4, (1, 3): 6.7, (2, 3): -12.4}
    signal = time_signal(lines_of(system([5, 5, -5, -5], pairs)), TIMES)
    assert np.abs(signal.imag).max() < 1e-5
    assert np.ptp(signal.real) > 1


def test_reversing_all_shifts_mirrors_the_spectrum():
    spins = random_system(5, 5)
    mirrored = SpinSystem(spins.names, -spins.shifts_ppm, spins.couplings)
    a, b = (time_signal(lines_of(one), TIMES) for one in (spins, mirrored))
    np.testing.assert_allclose(a, b.conj(), atol=2e-5)


def test_reversing_all_couplings_changes_nothing_but_relative_signs_do():
    spins = system([0.0, 4.0, 9.0], {(0, 1): -15.0, (0, 2): 4.0, (1, 2): 9.0})
    reverse = SpinSystem(spins.names, spins.shifts_ppm, -spins.couplings)
    one_sign = system([0.0, 4.0, 9.0], {(0, 1): 15.0, (0, 2): 4.0, (1, 2): 9.0})
    base, same, other = (time_signal(lines_of(one), TIMES) for one in (spins, reverse, one_sign))
    np.testing.assert_allclose(base, same, atol=1e-5)
    assert np.abs(base - other).max() > 0.1


def test_independent_groups_are_the_sum_of_their_spectra():
    both = system([0.0, 5.0, 20.0, 26.0], {(0, 1): 7.0, (2, 3): 9.0})
    parts = [both.part([0, 1]), both.part([2, 3])]
    assert both.coupled_groups() == [[0, 1], [2, 3]]
    total = sum(time_signal(lines_of(part), TIMES) for part in parts)
    np.testing.assert_allclose(time_signal(lines_of(both), TIMES), total, atol=1e-5)


# unlike nuclei


def test_phosphorus_splits_equally_at_any_field():
    spins = system([3.8, 0.0], {(0, 1): 11.0}, counts=np.array([9, 1]), nuclei=("1H", "31P"))
    for larmor in (1e6, 4.26e6, 6e8):
        found = line_list(spins, larmor, 3.8)
        np.testing.assert_allclose(found.frequencies, [-5.5, 5.5], atol=1e-6)
        np.testing.assert_allclose(found.intensities, [4.5, 4.5], rtol=1e-9)


def test_groups_without_a_proton_are_not_seen():
    spins = system([2.0, 0.0, 5.0], {(1, 2): 18.0}, nuclei=("1H", "31P", "31P"))
    found = lines_of(spins)
    np.testing.assert_allclose(found.frequencies, [2.0])
    assert found.total == spins.protons == 1


def test_coupling_to_unlike_nuclei_is_weak_or_said_to_be_doubtful():
    spins = system([0.0, 0.0], {(0, 1): 90.0}, nuclei=("1H", "15N"))
    with pytest.warns(InputWarning, match=r"H0, H1.*90 Hz.*weak"):
        line_list(spins, 1e4)
    with pytest.raises(InputError, match="zero field"):
        line_list(spins, 0.0)


# decay and time signals


def test_lines_turn_clockwise_and_decay():
    one = LineList(np.array([10.0]), np.array([3.0]), np.array([2.0]))
    expected = 3 * np.exp(-2j * np.pi * 10 * TIMES - TIMES * (2 + 1 / 0.3))
    np.testing.assert_allclose(time_signal(one, TIMES, 0.3), expected, atol=1e-12)


def test_protons_of_higher_shift_have_positive_frequency():
    found = line_list(system([5.70], {}), 4e6, reference_shift_ppm=4.70)
    np.testing.assert_allclose(found.frequencies, [4.0], atol=1e-9)


@pytest.mark.parametrize(
    "times",
    [
        np.arange(4096) * 1e-3,
        0.02 + np.arange(1001) * 3e-4,
        np.arange(7)[::-1] * 0.01,
        np.sort(np.random.default_rng(0).uniform(0, 1, 50)),
        np.array([0.3]),
        np.zeros(5),
    ],
)
def test_fast_time_signal_equals_the_direct_sum(times):
    rng = np.random.default_rng(1)
    lines = LineList(rng.uniform(-900, 900, 5000), rng.random(5000), 9 * rng.random(5000))
    signal = time_signal(lines, times)
    probe = np.unique(np.linspace(0, len(times) - 1, 40).astype(int))
    exponent = -2j * np.pi * lines.frequencies - lines.decay_rates
    direct = np.exp(np.outer(times[probe], exponent)) @ lines.intensities
    assert signal.shape == times.shape
    np.testing.assert_allclose(signal[probe], direct, atol=1e-12 * lines.total)


def test_weak_lines_are_dropped_within_the_stated_share():
    spins = random_system(7, 7)
    exact = lines_of(spins, dropped_fraction=0.0)
    for fraction in (1e-6, 1e-3, 1e-2):
        fewer = lines_of(spins, dropped_fraction=fraction)
        error = np.abs(time_signal(fewer, TIMES) - time_signal(exact, TIMES)).max()
        assert len(fewer) < len(exact)
        assert error <= fraction * 7 * 1.001
        assert 7 * (1 - fraction) <= fewer.total <= 7 * (1 + 1e-9)


def test_degenerate_lines_are_merged_only_at_equal_decay():
    lines = LineList(np.array([1.0, 2.0, 1.0, 1.0]), np.ones(4), np.array([0.5, 0.5, 0.5, 3.0]))
    merged = lines.merged()
    assert merged.frequencies.tolist() == [1.0, 1.0, 2.0]
    assert sorted(merged.intensities.tolist()) == [1.0, 1.0, 2.0]


def test_each_spin_decays_at_its_own_rate_at_high_field():
    spins = system([0.0, 1e7], {(0, 1): 7.0}, decay_times=np.array([0.2, 1.0]))
    found = lines_of(spins)
    near = np.abs(found.frequencies) < 1e3
    np.testing.assert_allclose(found.decay_rates[near], 5.0, rtol=1e-6)
    np.testing.assert_allclose(found.decay_rates[~near], 1.0, rtol=1e-6)


def test_decay_of_a_strongly_coupled_pair_follows_its_relaxation_matrix():
    """Eigenvalues of the 2 × 2 coherence equation of AB with a rate for either proton."""
    rates, (high, low), coupling = np.array([0.05, 0.11]), (4.0, -4.0), 7.0
    spins = system([high, low], {(0, 1): coupling}, decay_times=1 / rates)
    found = lines_of(spins)
    for sign in (1, -1):
        block = np.array(
            [[high + sign * coupling / 2, -sign * coupling / 2],
             [-sign * coupling / 2, low + sign * coupling / 2]]
        )  # fmt: skip
        values = np.linalg.eigvals(-2j * np.pi * block - np.diag(rates))
        for value in values:
            nearest = np.argmin(np.abs(found.frequencies + value.imag / (2 * np.pi)))
            assert found.frequencies[nearest] == pytest.approx(-value.imag / (2 * np.pi), abs=1e-4)
            assert found.decay_rates[nearest] == pytest.approx(-value.real, rel=1e-4)
