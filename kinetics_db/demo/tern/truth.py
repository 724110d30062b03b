"""What is true in *tern*: one mechanism, with constants of its own at each of three temperatures."""

from __future__ import annotations

from kinetics_db.demo.invented.plan import Truth

MECHANISM = """\
# The alcohol and the base add to the lactone and can leave again; the adduct opens and sets the base free.
lactone + alcohol + base   <--k_add / k_rev-->   adduct
adduct                     --k_open-->           ester + base
# Water opens the lactone too; the acid binds the base for good.
lactone + water + base     --k_hyd-->            acid
"""

#: degC -> constants in mol/L and s
CONSTANTS = {
    15.0: {"k_add": 1.15e-2, "k_rev": 3.6e-4, "k_open": 1.7e-4, "k_hyd": 1.3e-3},
    25.0: {"k_add": 2.05e-2, "k_rev": 1.02e-3, "k_open": 4.2e-4, "k_hyd": 2.9e-3},
    35.0: {"k_add": 3.5e-2, "k_rev": 2.75e-3, "k_open": 9.8e-4, "k_hyd": 6.1e-3},
}

TRUTH = Truth(mechanism=MECHANISM, constants=CONSTANTS)
