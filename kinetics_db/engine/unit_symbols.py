"""The unit symbols and words that are accepted, with their names in pint."""

from __future__ import annotations

from collections.abc import Mapping

SI = {
    "f": "femto", "p": "pico", "n": "nano", "µ": "micro", "u": "micro", "m": "milli",
    "c": "centi", "d": "deci", "k": "kilo", "M": "mega", "G": "giga",
}  # fmt: skip
PREFIX_EXPONENT = {
    "femto": -15, "pico": -12, "nano": -9, "micro": -6, "milli": -3, "centi": -2, "deci": -1,
    "kilo": 3, "mega": 6, "giga": 9,
}  # fmt: skip
# symbol -> (name in pint, prefixes that people write before it)
SYMBOLS: Mapping[str, tuple[str, str]] = {
    "s": ("second", "fpnµum"), "sec": ("second", "nµum"), "min": ("minute", ""), "h": ("hour", ""),
    "hr": ("hour", ""), "d": ("day", ""), "wk": ("week", ""),
    "M": ("molar", "fpnµum"), "mol": ("mole", "fpnµumk"), "einstein": ("mole", "nµum"),
    "L": ("liter", "fpnµumcd"), "l": ("liter", "nµumcd"), "cc": ("cubic_centimeter", ""),
    "g": ("gram", "pnµumk"), "t": ("metric_ton", ""), "Da": ("dalton", "kM"),
    "m": ("meter", "pnµumcdk"), "Å": ("angstrom", ""),
    "K": ("kelvin", "m"), "degC": ("degree_Celsius", ""), "°C": ("degree_Celsius", ""),
    "Cel": ("degree_Celsius", ""), "degF": ("degree_Fahrenheit", ""), "°F": ("degree_Fahrenheit", ""),
    "Pa": ("pascal", "mkMG"), "bar": ("bar", "mµu"), "atm": ("standard_atmosphere", ""),
    "torr": ("torr", "m"),
    "Torr": ("torr", "m"), "mmHg": ("millimeter_Hg", ""), "psi": ("psi", ""),
    "J": ("joule", "nµumkM"), "cal": ("calorie", "k"), "eV": ("electron_volt", "mkM"),
    "W": ("watt", "nµumkM"), "Hz": ("hertz", "mkMG"), "V": ("volt", "nµumk"), "A": ("ampere", "pnµum"),
    "C": ("coulomb", "nµum"), "N": ("newton", "nµumk"), "S": ("siemens", "nµum"), "Ω": ("ohm", "mkMG"),
    "T": ("tesla", "m"), "lm": ("lumen", ""), "lx": ("lux", "k"), "cd": ("candela", "m"),
    "kat": ("katal", "nµum"),
    "deg": ("degree", ""), "°": ("degree", ""), "rad": ("radian", "m"), "rpm": ("revolutions_per_minute", ""),
    "%": ("percent", ""), "percent": ("percent", ""), "mol%": ("percent", ""), "wt%": ("percent", ""),
    "vol%": ("percent", ""), "ppm": ("ppm", ""), "equiv": ("", ""), "eq": ("", ""),
    "a.u.": ("arbitrary", ""), "a.u": ("arbitrary", ""), "au": ("arbitrary", ""), "arb.u.": ("arbitrary", ""),
    "counts": ("arbitrary", ""), "cps": ("arbitrary/s", ""), "AU": ("arbitrary", "µum"),
    "OD": ("arbitrary", "m"),
    "[in_i]": ("inch", ""), "[lb_av]": ("pound", ""), "[pi]": ("pi", ""), "[ly]": ("light_year", ""),
    "[mu_0]": ("vacuum_permeability", ""),
}  # fmt: skip
WORDS: Mapping[str, str] = {
    "second": "s", "minute": "min", "hour": "h", "day": "d", "week": "wk", "litre": "L", "liter": "L",
    "gram": "g", "gramme": "g", "mole": "mol", "metre": "m", "meter": "m", "molar": "M", "kelvin": "K",
    "joule": "J", "calorie": "cal", "watt": "W", "pascal": "Pa", "volt": "V", "hertz": "Hz",
}  # fmt: skip
ALIASES: Mapping[str, str] = {
    "secs": "s", "mins": "min", "hrs": "h", "celsius": "degC", "Celsius": "degC", "angstrom": "Å", "ohm": "Ω",
    "mol-%": "%", "mol %": "%", "arb. u.": "a.u.", "arb. units": "a.u.", "a. u.": "a.u.",
    "deg C": "degC", "° C": "degC", "ºC": "degC", "degrees C": "degC", "deg F": "degF",
}  # fmt: skip

ANY_CASE = frozenset(
    ["sec", "secs", "min", "mins", "hrs", "percent", *WORDS, *(f"{word}s" for word in WORDS)]
)
