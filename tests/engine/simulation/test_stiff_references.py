"""Stiff problems of the literature with reference solutions of two independent high-accuracy integrators.

Robertson (1966): A to B, 2 B to B + C, B + C to A + C. HIRES: Schaefer (1975), as in the test set for
initial value problems; its published end values are quoted from memory and agree with the recomputation.
The enzyme mechanism's values were recomputed in the same way.
"""

import numpy as np

from kinetics_db.engine import parse_mechanism, simulate

ROBERTSON = parse_mechanism("A --k1--> B\n2 B --k2--> C + B\nB + C --k3--> A + C")
ROBERTSON_CONSTANTS = {"k1": 0.04, "k2": 3e7, "k3": 1e4}
ROBERTSON_REFERENCE = {
    0.4: (0.9851721138609888, 3.386395378974902e-05, 0.014794022185220308),
    40.0: (0.7158270687194029, 9.185534764557773e-06, 0.2841637457458291),
    4e3: (0.18320225777670932, 8.942371252775933e-07, 0.8167968479861636),
    4e5: (0.004938274520980194, 1.9849940879545334e-08, 0.9950617056290768),
    4e7: (5.203071844120612e-05, 2.0813357318925535e-10, 0.9999479690734275),
    4e9: (5.208276611435781e-07, 2.0833117166045083e-12, 0.9999994791702564),
    4e10: (5.2083451767819404e-08, 2.083338177918566e-13, 0.9999999479163416),
}


def test_robertson_is_followed_to_the_end_with_its_trace_intermediate_in_relative_accuracy():
    times = list(ROBERTSON_REFERENCE)
    curves = simulate(ROBERTSON, constants=ROBERTSON_CONSTANTS, start={"A": 1.0}, times=times)
    assert curves.outcome.ok, curves.outcome.message
    np.testing.assert_allclose(curves.values, list(ROBERTSON_REFERENCE.values()), rtol=5e-6)


def test_robertson_with_sensitivities_ends_in_a_bounded_number_of_steps():
    times = list(ROBERTSON_REFERENCE)
    curves = simulate(
        ROBERTSON,
        constants=ROBERTSON_CONSTANTS,
        start={"A": 1.0},
        times=times,
        sensitivities_to=("k1", "k2", "k3"),
        max_steps=6000,
    )
    assert curves.outcome.ok, curves.outcome.message
    np.testing.assert_allclose(curves.values, list(ROBERTSON_REFERENCE.values()), rtol=5e-6)
    # time can be scaled out: t df/dt = sum over k of k df/dk, for every species
    k = np.array([0.04, 3e7, 1e4])
    scaled = curves.sensitivities @ k
    y = curves.values
    v = np.stack([k[0] * y[:, 0], k[1] * y[:, 1] ** 2, k[2] * y[:, 1] * y[:, 2]], axis=1)
    rates_of_a = v[:, 2] - v[:, 0]
    np.testing.assert_allclose(scaled[:5, 0], np.array(times)[:5] * rates_of_a[:5], rtol=1e-4)


def test_hires_reaches_the_published_end_values():
    # written species by species, since several of its terms are not steps between two species
    text = "\n".join(
        [
            "nothing --{ -1.71*[Y1] + 0.43*[Y2] + 8.32*[Y3] + 0.0007 }--> Y1",
            "nothing --{ 1.71*[Y1] - 8.75*[Y2] }--> Y2",
            "nothing --{ -10.03*[Y3] + 0.43*[Y4] + 0.035*[Y5] }--> Y3",
            "nothing --{ 8.32*[Y2] + 1.71*[Y3] - 1.12*[Y4] }--> Y4",
            "nothing --{ -1.745*[Y5] + 0.43*[Y6] + 0.43*[Y7] }--> Y5",
            "nothing --{ -280*[Y6]*[Y8] + 0.69*[Y4] + 1.71*[Y5] - 0.43*[Y6] + 0.69*[Y7] }--> Y6",
            "nothing --{ 280*[Y6]*[Y8] - 1.81*[Y7] }--> Y7",
            "nothing --{ -280*[Y6]*[Y8] + 1.81*[Y7] }--> Y8",
        ]
    )
    curves = simulate(
        parse_mechanism(text), constants={}, start={"Y1": 1.0, "Y8": 0.0057}, times=[5.0, 321.8122], rtol=1e-9
    )
    assert curves.outcome.ok, curves.outcome.message
    expected = [
        [
            0.03165167570456923,
            0.006481549531058155,
            0.004583451064747278,
            0.08974323273518019,
            0.1624514537526558,
            0.6850438961444324,
            0.005646700341920569,
            5.329965807945251e-05,
        ],
        [
            0.0007371312573325668,
            0.0001442485726316185,
            5.888729740967575e-05,
            0.001175651343283149,
            0.002386356198831331,
            0.006238968252742796,
            0.002849998395185769,
            0.002850001604814231,
        ],
    ]
    np.testing.assert_allclose(curves.values, expected, rtol=2e-6)


def test_an_enzyme_six_orders_of_magnitude_thinner_than_molar_keeps_its_accuracy():
    network = parse_mechanism("E + S <--kf / kr--> ES\nES --kcat--> E + P")
    curves = simulate(
        network,
        constants={"kf": 1e3, "kr": 1.0, "kcat": 0.5},
        start={"E": 1e-6, "S": 1e-3},
        times=[10.0, 1000.0, 10000.0],
    )
    expected = [
        [6.005376126874642e-07, 0.0009976820063665073, 3.9946238731253703e-07, 1.91853124618314e-06],
        [6.48798631405695e-07, 0.0008118894856611433, 3.512013685943063e-07, 0.00018775931297026533],
        [9.575366445004125e-07, 6.650613451049994e-05, 4.246335549958842e-08, 0.0009334514021340031],
    ]
    np.testing.assert_allclose(curves.values, expected, rtol=1e-6)
