"""Charges and stock recipes to concentrations with the uncertainties of their causes."""

import math

import pytest

from kinetics_db.engine.amounts import (
    Charge,
    Contribution,
    Lot,
    SharedError,
    Stock,
    StockConcentration,
    StockRecipe,
    TotalVolume,
    charge_contributions,
    run_concentrations,
    stock_concentrations,
)
from kinetics_db.errors import InvalidInput

ESTER = Lot("lot 1", "ester", molar_mass=150.0, purity=0.98, purity_u=0.0049, density=1200.0, density_u=6.0)
TEN_ML = TotalVolume(0.010, 0.00005)


def only(charge: Charge, volume: TotalVolume = TEN_ML) -> Contribution:
    (found,) = charge_contributions(charge, volume)
    return found


def test_a_weighed_standard_reproduces_the_published_example() -> None:
    # EURACHEM/CITAC guide CG 4, example A1 (cadmium standard, 1002.7 +- 0.9 mg/L); from memory.
    cadmium = Lot("lot", "Cd", molar_mass=112.414, purity=0.9999, purity_u=0.000058)
    found = only(Charge(cadmium, 100.28, "mg", 0.05), TotalVolume(0.1000, 0.00007))
    milligrams_per_litre = found.concentration * 112.414 * 1000
    assert milligrams_per_litre == pytest.approx(1002.7, abs=0.05)
    assert milligrams_per_litre * found.relative_u == pytest.approx(0.9, abs=0.05)


def test_a_mass_becomes_an_amount_by_purity_and_molar_mass() -> None:
    found = only(Charge(ESTER, 15.0, "mg", 0.15))
    assert found.compound == "ester"
    assert found.amount == pytest.approx(0.015 * 0.98 / 150, rel=1e-15)
    assert found.concentration == pytest.approx(0.0098, rel=1e-15)


def test_the_causes_of_the_uncertainty_are_kept_apart() -> None:
    found = only(Charge(ESTER, 15.0, "mg", 0.15))
    assert found.own_relative_u == pytest.approx(0.01)
    assert found.shared == (SharedError("lot 1 purity", pytest.approx(0.005)),)
    assert found.run_shared == (SharedError("volume", pytest.approx(0.005)),)
    assert found.relative_u == pytest.approx(math.sqrt(0.01**2 + 0.005**2 + 0.005**2))


def test_the_combined_uncertainty_agrees_with_drawn_values() -> None:
    import numpy as np

    draw = np.random.default_rng(7).standard_normal((4, 200_000))
    mass = 15.0e-3 * (1 + 0.01 * draw[0])
    purity, density_free_volume = 0.98 + 0.0049 * draw[1], 0.010 + 0.00005 * draw[2]
    sampled = mass * purity / 150 / density_free_volume
    found = only(Charge(ESTER, 15.0, "mg", 0.15))
    assert found.relative_u == pytest.approx(float(sampled.std() / sampled.mean()), rel=0.01)


def test_a_neat_volume_needs_the_density_and_shares_its_error() -> None:
    found = only(Charge(ESTER, 100.0, "uL", 0.5))
    assert found.amount == pytest.approx(100e-6 * 1200 * 0.98 / 150, rel=1e-14)
    assert [e.owner for e in found.shared] == ["lot 1 purity", "lot 1 density"]
    with pytest.raises(InvalidInput, match="density of lot 2 is not known"):
        only(Charge(Lot("lot 2", "acid", molar_mass=60.0), 100.0, "uL"))


def test_a_mass_needs_the_molar_mass() -> None:
    with pytest.raises(InvalidInput, match="molar mass of lot 2 is not known") as caught:
        only(Charge(Lot("lot 2", "acid"), 1.0, "mg"))
    assert caught.value.problems[0].field == "molar_mass"


def test_an_amount_and_a_final_concentration_are_taken_as_they_are() -> None:
    amount = only(Charge(ESTER, 0.2, "mmol", 0.002))
    assert amount.concentration == pytest.approx(0.02, rel=1e-15)
    assert amount.shared == ()
    assert amount.run_shared[0].owner == "volume"
    final = only(Charge(ESTER, 5.0, "mM", 0.05))
    assert final.concentration == 0.005
    assert final.amount == pytest.approx(5e-5)
    assert final.run_shared == ()  # the volume does not enter
    assert final.relative_u == pytest.approx(0.01)


def test_a_stock_of_one_compound_gives_its_pipetting_to_the_run() -> None:
    stock = Stock("stock 3", (StockConcentration("base", 0.5, (SharedError("stock 3 base", 0.02),)),))
    found = only(Charge(stock, 200.0, "uL", 1.0))
    assert found.concentration == pytest.approx(0.01, rel=1e-15)
    assert found.own_relative_u == pytest.approx(0.005)
    assert found.shared == (SharedError("stock 3 base", 0.02),)


def test_the_pipetting_of_a_stock_of_two_compounds_moves_both_together() -> None:
    stock = Stock("stock 3", (StockConcentration("base", 0.5), StockConcentration("salt", 1.0)))
    base, salt = run_concentrations([Charge(ESTER, 1.0, "mg"), Charge(stock, 200.0, "uL", 1.0)], TEN_ML)[1:]
    assert base.own_relative_u == salt.own_relative_u == 0.0
    assert base.run_shared == salt.run_shared
    assert [e.owner for e in base.run_shared] == ["volume", "charge 2"]


def test_a_stock_weighed_in_needs_its_density() -> None:
    component = (StockConcentration("base", 0.5),)
    with pytest.raises(InvalidInput, match="density of stock 3"):
        only(Charge(Stock("stock 3", component), 0.2, "g"))
    found = only(Charge(Stock("stock 3", component, density=800.0, density_u=4.0), 0.2, "g"))
    assert found.amount == pytest.approx(0.2 / 800 * 0.5)
    assert found.shared == (SharedError("stock 3 density", pytest.approx(0.005)),)


def test_a_stock_recipe_hands_its_errors_to_all_who_draw_from_it() -> None:
    recipe = StockRecipe("stock 5", (Charge(ESTER, 1.5, "g", 0.0015),), TotalVolume(0.1, 0.0002))
    stock = stock_concentrations(recipe)
    (component,) = stock.components
    assert component.concentration == pytest.approx(1.5 * 0.98 / 150 / 0.1, rel=1e-14)
    assert dict(component.shared) == pytest.approx(
        {"stock 5 ester": 0.001, "stock 5 volume": 0.002, "lot 1 purity": 0.005}
    )
    run = only(Charge(stock, 1.0, "mL", 0.01))
    assert run.concentration == pytest.approx(component.concentration / 10, rel=1e-14)
    assert run.shared == component.shared
    assert run.own_relative_u == pytest.approx(0.01)


def test_a_diluted_stock_keeps_the_errors_of_its_parent_apart() -> None:
    parent = Stock("stock 1", (StockConcentration("dye", 0.01, (SharedError("stock 1 dye", 0.03),)),))
    recipe = StockRecipe("stock 2", (Charge(parent, 1.0, "mL", 0.004),), TotalVolume(0.1, 0.0001))
    (diluted,) = stock_concentrations(recipe).components
    assert diluted.concentration == pytest.approx(1e-4, rel=1e-14)
    assert dict(diluted.shared) == pytest.approx(
        {"stock 2 dye": 0.004, "stock 2 volume": 0.001, "stock 1 dye": 0.03}
    )


def test_charges_of_one_compound_add_own_errors_in_quadrature_and_shared_ones_linearly() -> None:
    charges = [Charge(ESTER, 15.0, "mg", 0.15), Charge(ESTER, 15.0, "mg", 0.15)]
    (total,) = run_concentrations(charges, TEN_ML)
    assert total.concentration == pytest.approx(0.0196, rel=1e-14)
    assert total.own_relative_u == pytest.approx(0.01 / math.sqrt(2))
    assert total.shared == (SharedError("lot 1 purity", pytest.approx(0.005)),)
    assert total.run_shared == (SharedError("volume", pytest.approx(0.005)),)


def test_compounds_keep_the_order_of_addition() -> None:
    other = Lot("lot 9", "water")
    charges = [Charge(other, 1.0, "mmol"), Charge(ESTER, 1.0, "mg"), Charge(other, 1.0, "mmol")]
    assert [c.compound for c in run_concentrations(charges, TEN_ML)] == ["water", "ester"]


def test_a_charge_of_nothing_is_a_concentration_of_zero() -> None:
    (found,) = run_concentrations([Charge(ESTER, 0.0, "mg"), Charge(ESTER, 0.0, "mg")], TEN_ML)
    assert found.concentration == 0.0
    assert found.relative_u == 0.0 or math.isfinite(found.relative_u)


@pytest.mark.parametrize(
    ("make", "field"),
    [
        (lambda: Charge(ESTER, -1.0, "mg"), "value"),
        (lambda: Charge(ESTER, math.nan, "mg"), "value"),
        (lambda: Charge(ESTER, 1.0, "mg", -0.1), "standard_uncertainty"),
        (lambda: Charge(ESTER, 0.0, "mg", 0.1), "standard_uncertainty"),
        (lambda: TotalVolume(0.0), "total_volume"),
        (lambda: TotalVolume(math.inf), "total_volume"),
        (lambda: Lot("l", "x", purity=98.0), "purity"),
        (lambda: Lot("l", "x", purity=0.0), "purity"),
        (lambda: Lot("l", "x", molar_mass=-1.0), "molar_mass"),
        (lambda: Lot("l", "x", density=0.0), "density"),
        (lambda: Stock("s", ()), "components"),
        (lambda: Stock("s", (StockConcentration("x", -1.0),)), "concentration"),
        (lambda: charge_contributions(Charge(ESTER, 1.0, "min"), TEN_ML), "unit"),
        (lambda: charge_contributions(Charge(ESTER, 1.0, "blob"), TEN_ML), "unit"),
        (lambda: only(Charge(Stock("s", (StockConcentration("x", 1.0),)), 1.0, "mmol")), "unit"),
    ],
)  # fmt: skip
def test_values_without_sense_are_refused_with_their_field(make: object, field: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        make()  # type: ignore[operator]
    assert caught.value.problems[0].field == field
    assert caught.value.problems[0].cure or field == "components"
