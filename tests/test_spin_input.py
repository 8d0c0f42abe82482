"""Faulty spin systems and requests: one line each."""

import numpy as np
import pytest

from recon.errors import InputError
from recon.physics.spins import SpinSystem, line_list, time_signal
from tests.test_spins import lines_of, random_system, system


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"couplings": [[0, 7.0], [6.0, 0]]}, r"not symmetric: A–B is 7 Hz, B–A 6 Hz"),
        ({"couplings": [[0, np.nan], [np.nan, 0]]}, "not symmetric: A–B is nan Hz"),
        ({"couplings": [[0, np.inf], [np.inf, 0]]}, "infinite"),
        ({"couplings": [[1.0, 7.0], [7.0, 0]]}, "spin A is coupled to itself"),
        ({"couplings": [[0.0]]}, r"shape \(1, 1\) for 2 spins"),
        ({"shifts_ppm": [1.0, np.nan]}, "shifts must be finite"),
        ({"shifts_ppm": [1.0]}, "1 shifts for 2 names"),
        ({"counts": [0, 1]}, "must be whole, 1 or more"),
        ({"counts": [1.5, 1]}, "must be whole, 1 or more"),
        ({"decay_times": [0.0, 1.0]}, "one positive time per spin"),
        ({"decay_times": [np.nan, 1.0]}, "one positive time per spin"),
        ({"nuclei": ("1H", "14N")}, "spin B: unknown nucleus 14N"),
        ({"nuclei": ("1H",)}, "1 nuclei for 2 names"),
        ({"nuclei": ("31P", "31P")}, "no proton"),
        ({"names": ("A", "A")}, "the name A is used twice"),
    ],
)
def test_a_faulty_system_gives_one_line(change, message):
    good = {"names": ("A", "B"), "shifts_ppm": [1.0, 2.0], "couplings": [[0, 7.0], [7.0, 0]]}
    with pytest.raises(InputError, match=message) as caught:
        SpinSystem(**(good | change))
    assert "\n" not in str(caught.value)


def test_more_than_twelve_coupled_spins_are_refused():
    random_system(12, 0)
    with pytest.raises(InputError, match=r"8192 states are more than 4096 \(12 spins\)"):
        random_system(13, 0)
    assert lines_of(system([1.0], {}, counts=np.array([60]))).total == 60


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda s: line_list(s, -1.0), "must be finite"),
        (lambda s: line_list(s, np.nan), "must be finite"),
        (lambda s: line_list(s, 1e6, np.inf), "must be finite"),
        (lambda s: line_list(s, 1e6, dropped_fraction=1.0), r"must be in \[0, 1\)"),
        (lambda s: time_signal(lines_of(s), [0.0, np.nan]), "finite seconds"),
        (lambda s: time_signal(lines_of(s), [-0.1, 0.0]), "none negative"),
        (lambda s: time_signal(lines_of(s), [0.0], t2_star=0.0), "must be positive"),
    ],
)
def test_faulty_requests_give_one_line(call, message):
    with pytest.raises(InputError, match=message):
        call(system([0.0, 1.0], {(0, 1): 7.0}))
