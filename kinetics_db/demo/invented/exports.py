"""Export files as instruments and spreadsheets write them: no two agree on anything.

A layout is a function from what was measured to bytes, and one line in `LAYOUTS`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from kinetics_db.demo.invented.reality import Exported


def _cells(export: Exported, *, decimals: int = 4, missing: str = "") -> list[list[str]]:
    return [
        [missing if np.isnan(value) else f"{value:.{decimals}f}" for value in row] for row in export.integrals
    ]


def _commented_commas(export: Exported) -> bytes:
    """Comment lines, then commas; minutes; units after a slash."""
    lines = [
        f"# sample: {export.run.code}",
        f"# temperature: {export.run.celsius:.1f} degC",
        f"# noise of an integral: {export.noise:.4g} a.u.",
        "#",
        ",".join(["time / min", *(f"{name} / a.u." for name in export.columns)]),
    ]
    for t, row in zip(export.times, _cells(export), strict=True):
        lines.append(",".join([f"{t / 60:.3f}", *row]))
    return ("\n".join(lines) + "\n").encode()


def _semicolons(export: Exported) -> bytes:
    """Preamble without comment signs, semicolons with one at the end, decimal commas, Windows-1252, CRLF."""
    lines = [
        f"Probe;{export.run.code};",
        f"Temperatur;{_comma(f'{export.run.celsius:.1f}')} °C;",
        f"Rauschen;{_comma(f'{export.noise:.4g}')} a.u.;",
        "",
        ";".join(["Zeit [min]", *(f"{name} [a.u.]" for name in export.columns)]) + ";",
    ]
    for t, row in zip(export.times, _cells(export), strict=True):
        lines.append(_comma(";".join([f"{t / 60:.3f}", *row])) + ";")
    return ("\r\n".join(lines) + "\r\n").encode("cp1252")


def _comma(numbers: str) -> str:
    return numbers.replace(".", ",")


def _units_row(export: Exported) -> bytes:
    """Tabs; names in one row and units in the next; seconds; 'n.d.' where nothing was integrated."""
    lines = [
        f"% run {export.run.code}, spectrometer table",
        "\t".join(["t", *export.columns]),
        "\t".join(["s", *("a.u." for _ in export.columns)]),
    ]
    for t, row in zip(export.times, _cells(export, missing="n.d."), strict=True):
        lines.append("\t".join([f"{t:.0f}", *row]))
    return ("\n".join(lines) + "\n").encode()


def _stop_watch(export: Exported) -> bytes:
    """Commas; times as minutes and seconds with a colon; no line end after the last row."""
    lines = [",".join(["time (mm:ss)", *(f"{name} (a.u.)" for name in export.columns)])]
    for t, row in zip(export.times, _cells(export), strict=True):
        minutes, seconds = divmod(round(t), 60)
        lines.append(",".join([f"{minutes:02d}:{seconds:02d}", *row]))
    return "\n".join(lines).encode()


def _spreadsheet(export: Exported) -> bytes:
    """Saved from a spreadsheet: byte order mark, stated separator, decimal commas, hours, numbers in quotes."""
    lines = ["sep=;", f"{export.run.code}: integrals" + ";" * len(export.columns)]
    lines.append(";".join(["time in h", *(f"{name} in a.u." for name in export.columns)]))
    for t, row in zip(export.times, _cells(export, missing="-"), strict=True):
        lines.append(_comma(";".join([f'"{t / 3600:.6f}"', *row])))
    return ("\r\n".join(lines) + "\r\n").encode("utf-8-sig")


def _aligned(export: Exported) -> bytes:
    """Columns aligned with blanks under a rule; seconds; the standard first, scientific notation."""
    order = [*range(len(export.columns) - 1, -1, -1)]
    names = ["time_s", *(f"{export.columns[i]}/a.u." for i in order)]
    lines = [f"// {export.run.code}", "".join(f"{name:>18}" for name in names), "-" * 18 * len(names)]
    for t, row in zip(export.times, export.integrals, strict=True):
        cells = [f"{t:.1f}", *("-" if np.isnan(row[i]) else f"{row[i]:.6e}" for i in order)]
        lines.append("".join(f"{cell:>18}" for cell in cells))
    return ("\n".join(lines) + "\n").encode()


#: Layouts by name; the name's ending is that of the file.
LAYOUTS: Mapping[str, tuple[str, Callable[[Exported], bytes]]] = {
    "commented commas": ("csv", _commented_commas),
    "semicolons": ("csv", _semicolons),
    "units row": ("txt", _units_row),
    "stop watch": ("csv", _stop_watch),
    "spreadsheet": ("csv", _spreadsheet),
    "aligned": ("dat", _aligned),
}


def export_file(export: Exported) -> tuple[str, bytes]:
    """Name and bytes of the file in which a run's integrals left the instrument."""
    ending, write = LAYOUTS[export.run.layout]
    return f"{export.run.code}.{ending}", write(export)
