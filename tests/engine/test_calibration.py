"""Signals to concentrations with standard uncertainties."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from kinetics_db.engine.calibration import (
    AsReported,
    InternalStandard,
    MeasuredSignal,
    ReportedColumn,
    ScaleError,
    recipe_from_plain,
    reduce,
    reduce_internal_standard,
    saturation_factor,
    take_as_reported,
)
from kinetics_db.engine.canonical import canonical_json
from kinetics_db.engine.tables import Table, table
from kinetics_db.errors import InvalidInput

STANDARD = MeasuredSignal("I(std)", "std", nuclei=9)
LACTONE = MeasuredSignal("I(lactone)", "lactone", nuclei=2)
RECIPE = InternalStandard(STANDARD, 0.005, (LACTONE,), noise_absolute=0.1)


def signals(
    rows: list[list[float]], names: tuple[str, ...] = ("I(std)", "I(lactone)"), unit: str = "a.u."
) -> Table:
    return table([("t", "s", "time"), *((name, unit, "signal") for name in names)], rows)


def test_the_concentration_follows_the_signals_per_nucleus() -> None:
    result = reduce_internal_standard(signals([[0.0, 9.0, 4.0], [60.0, 9.0, 2.0]]), RECIPE)
    assert result.table.column("lactone", "concentration") == pytest.approx([0.010, 0.005], rel=1e-15)
    assert [(c.name, c.unit, c.quantity) for c in result.table.columns] == [
        ("t", "s", "time"),
        ("lactone", "mol/L", "concentration"),
        ("lactone", "mol/L", "standard uncertainty"),
    ]
    assert result.basis == "mol/L"


def test_a_published_purity_by_internal_standard_is_reproduced() -> None:
    # Formula of F. Malz, H. Jancke, J. Pharm. Biomed. Anal. 38 (2005) 813; P = 0.8226423 recomputed from it.
    standard_moles = 10.05e-3 * 0.999 / 116.07
    recipe = InternalStandard(
        MeasuredSignal("I(std)", "std", nuclei=3),
        standard_moles,
        (MeasuredSignal("I(lactone)", "x", nuclei=2),),
        noise_absolute=1e-3,
    )
    found = reduce_internal_standard(signals([[0.0, 1.52, 1.0]]), recipe).table.column("x", "concentration")[
        0
    ]
    assert found * 194.19 / 20.15e-3 == pytest.approx(0.8226423206172314, rel=1e-12)


def test_the_uncertainty_of_a_ratio_follows_the_law_of_propagation() -> None:
    # Quotient of independent 10 +- 0.2 and 5 +- 0.1 by JCGM 100:2008, 5.1.2: 2 +- 0.0565685.
    recipe = InternalStandard(
        replace(STANDARD, nuclei=1, noise=0.1), 1.0, (replace(LACTONE, nuclei=1, noise=0.2),)
    )
    result = reduce_internal_standard(signals([[0.0, 5.0, 10.0]]), recipe)
    assert result.table.column("lactone", "concentration")[0] == 2.0
    assert result.table.column("lactone", "standard uncertainty")[0] == pytest.approx(
        0.0565685424949238, rel=1e-12
    )
    assert result.shared_relative_u == pytest.approx([0.02])


def test_the_standards_own_noise_is_counted_at_each_point() -> None:
    quiet = replace(RECIPE, standard=replace(STANDARD, noise=1e-9))
    rows = [[0.0, 9.0, 4.0], [60.0, 4.5, 4.0]]
    with_noise = reduce_internal_standard(signals(rows), RECIPE).table.column(
        "lactone", "standard uncertainty"
    )
    without = reduce_internal_standard(signals(rows), quiet).table.column("lactone", "standard uncertainty")
    c = np.array([0.010, 0.020])
    assert without == pytest.approx(c * 0.1 / 4.0)
    assert with_noise == pytest.approx(c * np.hypot(0.1 / 4.0, 0.1 / np.array([9.0, 4.5])))


def test_relative_and_absolute_noise_add_in_quadrature() -> None:
    recipe = replace(RECIPE, noise_relative=0.03, standard=replace(STANDARD, noise=1e-12))
    u = reduce_internal_standard(signals([[0.0, 9.0, 4.0]]), recipe).table.column(
        "lactone", "standard uncertainty"
    )
    assert u[0] / 0.010 == pytest.approx(math.hypot(0.1, 0.12) / 4.0)


def test_common_errors_stay_out_of_the_points_and_are_handed_over_with_their_owner() -> None:
    recipe = replace(
        RECIPE,
        standard_relative_u=0.01,
        standard_owner="stock 3",
        signals=(
            replace(LACTONE, response_factor=1.1, response_relative_u=0.02),
            MeasuredSignal("I(acid)", "acid", 1),
        ),
    )
    rows = signals([[0.0, 9.0, 4.0, 2.0]], ("I(std)", "I(lactone)", "I(acid)"))
    result = reduce_internal_standard(rows, recipe)
    assert result.scale_errors == (
        ScaleError("stock 3", 0.01, ("lactone", "acid")),
        ScaleError("response factor of lactone", 0.02, ("lactone",)),
    )
    exact = reduce_internal_standard(rows, replace(recipe, standard_relative_u=0.0))
    assert exact.table == result.table
    assert result.table.column("lactone", "concentration")[0] == pytest.approx(0.011)


def test_values_below_zero_are_kept_and_missing_cells_stay_missing() -> None:
    rows = [[0.0, 9.0, 4.0], [1.0, 9.0, -0.05], [2.0, math.nan, 4.0], [3.0, 9.0, math.nan]]
    result = reduce_internal_standard(signals(rows), RECIPE).table
    c, u = result.column("lactone", "concentration"), result.column("lactone", "standard uncertainty")
    assert c[1] == pytest.approx(0.005 * (-0.05 / 2))
    assert u[1] > 0
    assert np.isnan(c[2:]).all()
    assert np.isnan(u[2:]).all()


def test_weak_signals_get_their_uncertainty_by_monte_carlo_with_a_stated_seed() -> None:
    weak = signals([[0.0, 9.0, 0.5], [1.0, 0.5, 4.0], [2.0, 9.0, 4.0]])
    one = reduce_internal_standard(weak, RECIPE)
    assert one.table == reduce_internal_standard(weak, RECIPE).table
    assert one.table != reduce_internal_standard(weak, replace(RECIPE, seed=2)).table
    assert any("2 uncertainties by Monte Carlo (20000 draws, seed 1)" in note for note in one.notes)
    u = one.table.column("lactone", "standard uncertainty")
    linear = (
        0.005 * 9 / 2 * np.hypot(0.1 / weak.values[:, 1], weak.values[:, 2] * 0.1 / weak.values[:, 1] ** 2)
    )
    assert u[0] == pytest.approx(linear[0], rel=0.03)  # a weak numerator is still linear
    assert u[1] > 1.02 * linear[1]  # a weak standard is not: the ratio has a long upper tail
    assert u[2] == pytest.approx(linear[2], rel=1e-12)


def test_more_weak_readings_than_can_be_drawn_are_refused_with_the_draws_that_would_do() -> None:
    rows = [[float(i), 0.5, 4.0] for i in range(300)]
    with pytest.raises(InvalidInput) as refused:
        reduce_internal_standard(signals(rows), replace(RECIPE, draws=1_000_000))
    (problem,) = refused.value.problems
    assert problem.field == "signals"
    assert "300 or more readings are below 10 times their noise" in problem.message
    assert problem.cure == "average neighbouring readings first, or 666000 draws"
    reduce_internal_standard(signals(rows[:20]), replace(RECIPE, draws=20_000))


def test_the_monte_carlo_interval_agrees_with_the_exact_distribution_of_the_ratio() -> None:
    from scipy.optimize import brentq
    from scipy.stats import norm

    # P(X/Y < r) = Phi((r y - x) / sqrt(sx^2 + r^2 sy^2)) for y >> sy: D. V. Hinkley, Biometrika 56 (1969) 635.
    def quantile(p: float) -> float:
        return float(brentq(lambda r: norm.cdf((r * 0.6 - 4.0) / math.hypot(0.1, r * 0.1)) - p, 1, 60))

    half = (quantile(norm.cdf(1)) - quantile(norm.cdf(-1))) / 2
    recipe = replace(RECIPE, draws=400_000)
    u = reduce_internal_standard(signals([[0.0, 0.6, 4.0]]), recipe).table.column(
        "lactone", "standard uncertainty"
    )
    assert u[0] == pytest.approx(0.005 * 9 / 2 * half, rel=0.01)


def test_the_noise_is_estimated_from_the_scatter_when_none_is_stated() -> None:
    rng = np.random.default_rng(3)
    t = np.sort(rng.uniform(0, 3000, 400))
    rows = np.column_stack(
        [t, 9 + 0.05 * rng.standard_normal(400), 4 * np.exp(-t / 900) + 0.02 * rng.standard_normal(400)]
    )
    result = reduce_internal_standard(signals(rows.tolist()), replace(RECIPE, noise_absolute=None))
    estimates = [float(note.rsplit(" ", 1)[1]) for note in result.notes if "estimated" in note]
    assert estimates == pytest.approx([0.05, 0.02], rel=0.15)
    with pytest.raises(InvalidInput, match="noise of 'I\\(std\\)' cannot be estimated"):
        reduce_internal_standard(signals(rows[:5].tolist()), replace(RECIPE, noise_absolute=None))


def test_the_estimated_uncertainties_cover_what_they_should() -> None:
    rng = np.random.default_rng(11)
    true = np.full(4000, 4.0)
    rows = np.column_stack(
        [np.arange(4000.0), 9 + 0.1 * rng.standard_normal(4000), true + 0.1 * rng.standard_normal(4000)]
    )
    result = reduce_internal_standard(signals(rows.tolist()), RECIPE).table
    pull = (result.column("lactone", "concentration") - 0.01) / result.column(
        "lactone", "standard uncertainty"
    )
    assert pull.std() == pytest.approx(1.0, abs=0.04)
    assert pull.mean() == pytest.approx(0.0, abs=0.05)


# Common practice, no source: steady-state signal of repeated pulses, recomputed.
@pytest.mark.parametrize(
    ("angle", "ratio", "expected"),
    [
        (30, 0.5, 0.41441465205156575), (30, 5, 0.4995459939042629), (45, 1, 0.6041287825944209),
        (90, 0.5, 0.3934693402873666), (90, 1, 0.6321205588285577), (90, 5, 0.9932620530009145),
        (90, 10, 0.9999546000702375),
    ],
)  # fmt: skip
def test_saturation_factors(angle: float, ratio: float, expected: float) -> None:
    assert saturation_factor(2.0, 2.0 * ratio, angle) == pytest.approx(expected, rel=1e-13)


def test_the_ernst_angle_gives_the_strongest_signal() -> None:
    # Ernst angle arccos(exp(-TR/T1)); for TR/T1 = 1 it is 68.415 degrees (common practice).
    angles = np.linspace(60, 80, 2001)
    best = angles[int(np.argmax([saturation_factor(1.0, 1.0, a) for a in angles]))]
    assert best == pytest.approx(68.41510376176294, abs=0.02)


def test_saturation_is_corrected_when_the_repetition_time_is_stated() -> None:
    recipe = replace(
        RECIPE,
        repetition_time=5.0,
        standard=replace(STANDARD, t1=5.0),
        signals=(replace(LACTONE, t1=1.0, t1_u=0.1),),
    )
    result = reduce_internal_standard(signals([[0.0, 9.0, 4.0]]), recipe)
    expected = 0.010 * 0.6321205588285577 / 0.9932620530009145
    assert result.table.column("lactone", "concentration")[0] == pytest.approx(expected, rel=1e-12)
    (error,) = result.scale_errors
    by_hand = 5.0 * math.exp(-5.0) / (1 - math.exp(-5.0)) * 0.1  # |d ln s / d T1| u(T1) at 90 degrees
    assert (error.owner, error.columns) == ("saturation of lactone", ("lactone",))
    assert error.relative_u == pytest.approx(by_hand, rel=1e-6)


def test_an_unknown_relaxation_time_needs_a_stated_uncertainty() -> None:
    with pytest.raises(InvalidInput, match="T1 of 'I\\(lactone\\)' is not stated"):
        replace(RECIPE, repetition_time=5.0, standard=replace(STANDARD, t1=5.0))
    stated = replace(
        RECIPE,
        repetition_time=50.0,
        standard=replace(STANDARD, t1=1.0),
        signals=(replace(LACTONE, saturation_relative_u=0.02),),
    )
    result = reduce_internal_standard(signals([[0.0, 9.0, 4.0]]), stated)
    assert result.scale_errors == (ScaleError("saturation of lactone", 0.02, ("lactone",)),)


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"standard_concentration": -0.005}, "standard_concentration"),
        ({"standard_concentration": math.nan}, "standard_concentration"),
        ({"standard_concentration": "5 mM"}, "standard_concentration"),
        ({"signals": ()}, "signals"),
        ({"signals": (replace(LACTONE, nuclei=0),)}, "signals[0].nuclei"),
        ({"signals": (LACTONE, LACTONE)}, "signals.species"),
        ({"signals": (replace(LACTONE, signal="I(std)"),)}, "signals.signal"),
        ({"standard": replace(STANDARD, response_factor=2.0)}, "standard.response_factor"),
        ({"noise_absolute": 0.0}, "noise_absolute"),
        ({"noise_absolute": -1.0}, "noise_absolute"),
        ({"flip_angle": 180.0}, "flip_angle"),
        ({"draws": 10}, "draws"),
        ({"seed": -1}, "seed"),
    ],
)
def test_a_recipe_without_sense_is_refused_with_the_field(change: dict[str, object], field: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        replace(RECIPE, **change)
    assert field in [p.field for p in caught.value.problems]


def test_an_unknown_signal_is_refused_with_the_known_ones() -> None:
    with pytest.raises(InvalidInput, match=r"no signal 'I\(lactone\)' \(one of I\(std\), other\)"):
        reduce_internal_standard(signals([[0.0, 9.0, 4.0]], ("I(std)", "other")), RECIPE)


@pytest.mark.parametrize("reading", [0.0, -1.0])
def test_a_standard_without_signal_is_refused_with_its_time(reading: float) -> None:
    with pytest.raises(InvalidInput, match="at 60 s"):
        reduce_internal_standard(signals([[0.0, 9.0, 4.0], [60.0, reading, 4.0]]), RECIPE)


def test_signals_in_different_units_cannot_be_compared() -> None:
    mixed = table(
        [("t", "s", "time"), ("I(std)", "a.u.", "signal"), ("I(lactone)", "mM", "signal")], [[0.0, 9.0, 4.0]]
    )
    with pytest.raises(InvalidInput, match="different units"):
        reduce_internal_standard(mixed, RECIPE)


# --- taken as reported


def reported(unit: str, rows: list[list[float]]) -> Table:
    names = ("A", "u(A)")[: len(rows[0]) - 1]
    return signals(rows, names, unit)


def test_reported_concentrations_are_converted_to_the_stored_unit() -> None:
    recipe = AsReported((ReportedColumn("A", "ester"),), constant_u=0.1)
    result = take_as_reported(reported("mM", [[0.0, 9.0], [1.0, math.nan], [2.0, -0.1]]), recipe)
    c, u = (result.table.column("ester", q) for q in ("concentration", "standard uncertainty"))
    assert np.array_equal(c, [0.009, np.nan, -0.0001], equal_nan=True)
    assert np.array_equal(u, [0.0001, np.nan, 0.0001], equal_nan=True)
    assert result.basis == "mol/L"


def test_percentages_stay_percentages_and_say_so() -> None:
    for unit, kept in (("%", "percent"), ("percent", "percent"), ("mol%", "percent"), ("1", "1")):
        result = take_as_reported(
            reported(unit, [[0.0, 88.35]]), AsReported((ReportedColumn("A", "pinene"),))
        )
        assert result.basis == "relative"
        assert result.table.columns[1].unit == kept
        assert result.table.column("pinene", "concentration")[0] == 88.35


def test_an_unstated_uncertainty_stays_missing_and_is_noted() -> None:
    result = take_as_reported(reported("%", [[0.0, 88.35]]), AsReported((ReportedColumn("A", "pinene"),)))
    assert np.isnan(result.table.column("pinene", "standard uncertainty")).all()
    assert any("a fit has to estimate it" in note for note in result.notes)


def test_a_column_of_uncertainties_is_used_and_converted() -> None:
    recipe = AsReported((ReportedColumn("A", "ester", uncertainty_signal="u(A)"),))
    result = take_as_reported(reported("mM", [[0.0, 9.0, 0.2], [1.0, 8.0, 0.3]]), recipe)
    assert result.table.column("ester", "standard uncertainty") == pytest.approx([0.0002, 0.0003], rel=1e-15)
    with pytest.raises(InvalidInput, match="not above zero"):
        take_as_reported(reported("mM", [[0.0, 9.0, 0.0]]), recipe)


def test_a_calibration_error_common_to_all_values_is_handed_over() -> None:
    recipe = AsReported(
        (ReportedColumn("A", "ester"),), constant_u=0.1, scale_relative_u=0.03, scale_owner="curve 2"
    )
    result = reduce(reported("mM", [[0.0, 9.0]]), recipe)
    assert result.scale_errors == (ScaleError("curve 2", 0.03, ("ester",)),)
    assert result.table.column("ester", "standard uncertainty")[0] == pytest.approx(0.0001)


@pytest.mark.parametrize(
    ("unit", "override", "message"),
    [
        ("", None, "has no unit"),
        ("a.u.", None, "is no concentration"),
        ("g/L", None, "is no concentration"),
        ("mM", "min", "is no concentration"),
    ],
)
def test_a_column_that_is_no_concentration_is_refused(unit: str, override: str | None, message: str) -> None:
    with pytest.raises(InvalidInput, match=message):
        take_as_reported(reported(unit, [[0.0, 1.0]]), AsReported((ReportedColumn("A", "x", unit=override),)))


def test_a_stated_unit_goes_over_that_of_the_file() -> None:
    recipe = AsReported((ReportedColumn("A", "x", unit="mM"),))
    assert take_as_reported(reported("", [[0.0, 1.0]]), recipe).table.column("x", "concentration")[0] == 0.001


def test_concentrations_and_percentages_do_not_mix_in_one_table() -> None:
    mixed = table([("t", "s", "time"), ("A", "mM", "signal"), ("B", "%", "signal")], [[0.0, 1.0, 2.0]])
    with pytest.raises(InvalidInput, match="different kinds"):
        take_as_reported(mixed, AsReported((ReportedColumn("A", "A"), ReportedColumn("B", "B"))))


def test_relative_uncertainty_of_a_zero_needs_a_constant_part() -> None:
    recipe = AsReported((ReportedColumn("A", "x"),), relative_u=0.05)
    with pytest.raises(InvalidInput, match="value of zero"):
        take_as_reported(reported("mM", [[0.0, 0.0]]), recipe)
    u = take_as_reported(reported("mM", [[0.0, 0.0]]), replace(recipe, constant_u=0.1)).table
    assert u.column("x", "standard uncertainty")[0] == pytest.approx(0.0001)


# --- recipes as records


@pytest.mark.parametrize(
    "recipe",
    [
        RECIPE,
        replace(
            RECIPE,
            repetition_time=5.0,
            standard=replace(STANDARD, t1=1.0),
            signals=(replace(LACTONE, t1=2.0),),
        ),
        AsReported(
            (ReportedColumn("A", "x", unit="%"), ReportedColumn("B", "y", uncertainty_signal="u(B)")),
            constant_u=0.5,
        ),
    ],
)
def test_a_recipe_comes_back_from_its_canonical_json(recipe: InternalStandard | AsReported) -> None:
    assert recipe_from_plain(json.loads(canonical_json(recipe.to_plain()))) == recipe


@pytest.mark.parametrize(
    ("spoil", "field"),
    [
        (lambda p: p.update(kind="magic"), "kind"),
        (lambda p: p.update(colour="red"), "colour"),
        (lambda p: p.pop("standard_concentration"), "standard_concentration"),
        (lambda p: p.update(standard_concentration="much"), "standard_concentration"),
        (lambda p: p.update(standard_concentration=None), "standard_concentration"),
        (lambda p: p.update(signals={"a": 1}), "signals"),
        (lambda p: p["signals"][0].pop("nuclei"), "signals[0].nuclei"),
        (lambda p: p["signals"][0].update(nuclei=[2]), "signals[0].nuclei"),
        (lambda p: p["standard"].update(signal=7), "standard.signal"),
        (lambda p: p.update(standard=None), "standard."),
    ],
)  # fmt: skip
def test_a_damaged_recipe_is_refused_with_the_field(spoil: object, field: str) -> None:
    plain = json.loads(canonical_json(RECIPE.to_plain()))
    spoil(plain)  # type: ignore[operator]
    with pytest.raises(InvalidInput) as caught:
        recipe_from_plain(plain)
    assert caught.value.problems[0].field == field


@pytest.mark.parametrize("plain", [None, [], "internal standard", {}, {"kind": ["x"]}])
def test_what_is_no_recipe_is_refused(plain: object) -> None:
    with pytest.raises(InvalidInput, match="no recipe of kind"):
        recipe_from_plain(plain)  # type: ignore[arg-type]
