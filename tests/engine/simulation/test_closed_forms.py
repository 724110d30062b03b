"""Simulations against closed-form solutions: textbook integrated rate laws, Bateman (1910) for chains,
Schnell & Mendoza (J. Theor. Biol. 187 (1997) 207) for Michaelis-Menten by the Lambert W function.

The values were computed from the formulas in high precision, outside this project.
"""

import numpy as np
import pytest

from kinetics_db.engine import parse_mechanism, simulate

CASES = {
    "first order: A0 exp(-kt)": (
        "A --k--> P",
        {"k": 0.1},
        {"A": 1.0},
        [1.0, 5.0, 10.0, 50.0],
        {"A": [0.90483741803595957, 0.60653065971263342, 0.36787944117144232, 0.0067379469990854671]},
    ),
    "reversible first order": (
        "A <--kf / kr--> B",
        {"kf": 0.3, "kr": 0.1},
        {"A": 1.0},
        [1.0, 2.0, 5.0, 20.0],
        {
            "A": [0.75274003452672948, 0.58699672308791619, 0.35150146242745952, 0.25025159697092688],
            "B": [0.24725996547327052, 0.41300327691208381, 0.64849853757254048, 0.74974840302907312],
        },
    ),
    "consecutive A, B, C (Harcourt & Esson)": (
        "A --k1--> B\nB --k2--> C",
        {"k1": 0.5, "k2": 0.2},
        {"A": 1.0},
        [1.0, 2.0, 4.0, 10.0, 30.0],
        {
            "A": [
                0.60653065971263342,
                0.36787944117144232,
                0.13533528323661269,
                0.0067379469990854671,
                3.0590232050182579e-7,
            ],
            "B": [
                0.35366682227558073,
                0.50406767477366163,
                0.5233228014676815,
                0.21432889372921204,
                0.0041307437905764277,
            ],
        },
    ),
    "chain of six (Bateman 1910)": (
        "A1 --k1--> A2\nA2 --k2--> A3\nA3 --k3--> A4\nA4 --k4--> A5\nA5 --k5--> A6",
        {"k1": 1.0, "k2": 0.5, "k3": 0.25, "k4": 0.8, "k5": 0.1},
        {"A1": 1.0},
        [1.0, 3.0, 10.0, 30.0],
        {
            "A2": [0.4773024370823822, 0.34668618356113177, 0.013385094138645964, 6.118044538511922e-7],
            "A4": [0.011103333475451193, 0.089448481644162217, 0.078232169921437204, 0.00066938576558877667],
            "A6": [5.408303114243596e-5, 0.0058436028129323176, 0.23022503576513022, 0.86971796903889951],
        },
    ),
    "2 A to P with -d[A]/dt = 2k[A]^2 (IUPAC)": (
        "2 A --k--> P",
        {"k": 0.1},
        {"A": 1.0},
        [1.0, 5.0, 10.0, 100.0],
        {
            "A": [0.83333333333333333, 0.5, 0.33333333333333333, 0.047619047619047619],
            "P": [0.083333333333333333, 0.25, 0.33333333333333333, 0.47619047619047619],
        },
    ),
    "A + B in equal amounts": (
        "A + B --k--> P",
        {"k": 0.1},
        {"A": 1.0, "B": 1.0},
        [1.0, 5.0, 10.0, 100.0],
        {"A": [0.90909090909090909, 0.66666666666666667, 0.5, 0.090909090909090909]},
    ),
    "A + B in unequal amounts": (
        "A + B --k--> P",
        {"k": 0.2},
        {"A": 1.0, "B": 1.5},
        [1.0, 5.0, 10.0, 50.0],
        {
            "A": [0.76015986677958664, 0.33942443929724267, 0.16247361568634495, 0.0022561167296606246],
            "P": [0.23984013322041336, 0.66057556070275733, 0.83752638431365505, 0.99774388327033938],
        },
    ),
    "third order: A0/sqrt(1 + 2k A0^2 t)": (
        "A --{ k*[A]^3 }--> P",
        {"k": 0.1},
        {"A": 2.0},
        [1.0, 5.0, 10.0],
        {"A": [1.4907119849998598, 0.89442719099991588, 0.66666666666666667]},
    ),
    "third order as mass action: -d[A]/dt = 3v": (
        "3 A --k--> P",
        {"k": 0.1 / 3.0},
        {"A": 2.0},
        [1.0, 5.0, 10.0],
        {"A": [1.4907119849998598, 0.89442719099991588, 0.66666666666666667]},
    ),
    "zero order until exhausted": (
        "A --{ k }--> P",
        {"k": 0.1},
        {"A": 1.0},
        [1.0, 5.0, 9.0],
        {"A": [0.9, 0.5, 0.1]},
    ),
    "parallel first order": (
        "A --k1--> P\nA --k2--> Q",
        {"k1": 0.3, "k2": 0.1},
        {"A": 1.0},
        [1.0, 5.0, 10.0],
        {
            "P": [0.24725996547327052, 0.64849853757254048, 0.73626327083344936],
            "Q": [0.082419988491090175, 0.21616617919084683, 0.24542109027781645],
        },
    ),
    "competition at first order (Ingold & Shaw)": (
        "A --kA--> P\nB --kB--> Q",
        {"kA": 0.3, "kB": 0.1},
        {"A": 1.0, "B": 2.0},
        [1.0, 5.0],
        {"A": [0.74081822068171787, 0.22313016014842983], "B": [1.8096748360719191, 1.2130613194252668]},
    ),
    "autocatalysis: the logistic curve": (
        "A + B --k--> 2 B",
        {"k": 1.0},
        {"A": 0.99, "B": 0.01},
        [1.0, 3.0, 4.59511985013459, 8.0, 15.0],
        {
            "A": [
                0.97327636901060478,
                0.83133521129317993,
                0.49999999999999998,
                0.03214329559575863,
                3.0283412616827725e-5,
            ]
        },
    ),
    "Michaelis-Menten by Lambert W": (
        "S --{ Vm*[S]/(Km + [S]) }--> P",
        {"Vm": 1.0, "Km": 0.5},
        {"S": 2.0},
        [0.5, 1.0, 2.0, 3.0, 5.0],
        {
            "S": [
                1.6088223610002747,
                1.2393001697495649,
                0.60108393659852147,
                0.186428183864704,
                0.0049090690522550294,
            ]
        },
    ),
    "zero-order photolysis under total absorption": (
        "A --{ v }--> P",
        {"v": 1.25e-6},
        {"A": 1e-3},
        [10.0, 100.0],
        {"A": [0.0009875, 0.000875]},
    ),
    "semi-batch: F/k (1 - exp(-kt))": (
        "nothing --F--> A\nA --k--> P",
        {"F": 0.02, "k": 0.1},
        {},
        [5.0, 20.0, 60.0],
        {"A": [0.078693868057473315, 0.17293294335267746, 0.19950424956466673]},
    ),
}


@pytest.mark.parametrize("case", CASES)
def test_the_simulation_follows_the_closed_form_to_one_part_in_a_million(case):
    text, constants, start, times, expected = CASES[case]
    curves = simulate(parse_mechanism(text), constants=constants, start=start, times=times)
    assert curves.outcome.ok, curves.outcome.message
    for species, values in expected.items():
        np.testing.assert_allclose(curves.of(species), values, rtol=1e-6, atol=1e-9 * max(values))


def test_equal_constants_of_consecutive_steps_are_no_special_case():
    """k1 = k2 makes the textbook formula singular; its limit is B = A0 k t exp(-kt)."""
    times = np.array([0.0, 1.0, 5.0, 20.0])
    network = parse_mechanism("A --k1--> B\nB --k2--> C")
    curves = simulate(network, constants={"k1": 0.3, "k2": 0.3}, start={"A": 1.0}, times=times)
    np.testing.assert_allclose(curves.of("B"), 0.3 * times * np.exp(-0.3 * times), rtol=1e-6, atol=1e-12)
