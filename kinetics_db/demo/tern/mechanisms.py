"""Three versions that rival each other over *tern*. Start values are guesses, one for all temperatures."""

from __future__ import annotations

from kinetics_db.demo.invented.plan import Rival
from kinetics_db.demo.tern.truth import MECHANISM

RIGHT = "hydrolysis of the lactone"

GUESSES = {"k_add": 6e-2, "k_rev": 3.5e-4, "k_open": 1e-3, "k_hyd": 1e-3}

RIVALS = (
    Rival(
        name=RIGHT,
        text=MECHANISM,
        note="reversible addition; water takes the lactone",
        starts=GUESSES,
    ),
    Rival(
        name="hydrolysis of the adduct",
        text="""\
lactone + alcohol + base   <--k_add / k_rev-->   adduct
adduct                     --k_open-->           ester + base
# Water takes the adduct and sets the alcohol free again.
adduct + water             --k_hyd-->            acid + alcohol
""",
        note="reversible addition; water takes the adduct",
        starts=GUESSES | {"k_hyd": 3e-4},
    ),
    Rival(
        name="opening by a second base",
        text="""\
lactone + alcohol + base   <--k_add / k_rev-->   adduct
# Another base takes part in the opening and comes out of it unchanged.
adduct + base              --k_open-->           ester + 2 base
lactone + water + base     --k_hyd-->            acid
""",
        note="reversible addition; the adduct opens with the help of a second base",
        starts=GUESSES | {"k_open": 1e-2},
    ),
)
