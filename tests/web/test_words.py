"""Words of the record as a page writes them."""

from __future__ import annotations

from types import SimpleNamespace

import pytest

from kinetics_db.web.words import dataset_text, message_text, place_shown


def test_a_dataset_is_told_apart_from_the_words_around_it() -> None:
    assert dataset_text(SimpleNamespace(name="all runs", number=3)) == "dataset 'all runs', version 3"  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("said", "written"),
    [
        (
            "a full step would lower -2 ln L by 1.2e-10 only",
            "a full step would lower −2 ln L by 1.2 × 10⁻¹⁰ only",
        ),
        ("a full step should lower -2 ln L by 3e+08", "a full step should lower −2 ln L by 3 × 10⁸"),
        ("run 'R-1e-07': charge 2", "run 'R-1e-07': charge 2"),
        ("run 'A1e-07' and lot 21e-07", "run 'A1e-07' and lot 21e-07"),
        ("iteration 6, cost 12.5", "iteration 6, cost 12.5"),
        ("1.5e-3 was typed so", "1.5e-3 was typed so"),
    ],
)
def test_numbers_in_messages_of_the_engine_get_the_letters_of_a_page(said: str, written: str) -> None:
    assert message_text(said) == written


@pytest.mark.parametrize(
    ("place", "read", "copied"),
    [
        ("288.15 K", "15 °C", "288.15 K"),
        ("253.15 K", "−20 °C", "253.15 K"),
        ("300.00 K", "26.85 °C", "300.00 K"),
        ("", "all runs", ""),
        ("run K-1", "run K-1", ""),
        ("lot 12 K", "lot 12 K", ""),
    ],
)
def test_a_temperature_is_read_in_degrees_celsius_and_copied_in_kelvin(
    place: str, read: str, copied: str
) -> None:
    shown = place_shown(place)
    assert (shown.text, shown.exact) == (read, copied)
