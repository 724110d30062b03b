"""Every page and every endpoint by name: which are lists, which have a bound of their own, which are neither."""

from __future__ import annotations

from collections.abc import Mapping

MOST_QUERIES = 5
"""Of a list: who asks, the project with the role, the rows, and what belongs to them."""

PAGE_LISTS = ("runs", "materials", "mechanisms", "datasets", "fits", "members", "tokens")
PAGES_WITH_A_BOUND: Mapping[str, int] = {"home": 5, "project": 16, "evidence": 8, "under-way": 3}
OTHER_PAGES = frozenset(
    """
    login logout search account withdraw-token new-project run-amounts new-run run revise-run seal-run runs-csv
    new-compound new-lot new-stock new-file file signals signals-csv reduce table table-csv supersede-table
    new-mechanism check-mechanism version new-dataset dataset dataset-csv new-fit fit fit-progress
    fit-residuals-csv fit-constants-csv fit-run stop-fit retry-fit evidence-csv
    """.split()
)
"""One record, a form, a file, something that is done; tests/scale says of each how large it is."""

ENDPOINT_LISTS: Mapping[str, str] = {
    "projects": "",
    "members": "",
    "compounds": "",
    "lots": "",
    "stocks": "",
    "runs": "",
    "run-revisions": "",
    "run-files": "",
    "run-tables": "",
    "mechanisms": "project=big",
    "versions": "",
    "datasets": "project=big",
    "fits": "project=big",
    "tokens": "",
}
"""With what the address needs after its question mark."""
ENDPOINTS_WITH_A_BOUND: Mapping[str, tuple[str, int]] = {"evidence": ("project=big", 8)}
OTHER_ENDPOINTS = frozenset(
    """
    health elsewhere schema docs project member run run-revision run-explanations seal-run file file-content
    signals signal-numbers table table-numbers supersede-table check-mechanism version simulate dataset
    dataset-table propose-fit fit fit-curves fit-evidence stop-fit retry-fit withdraw-token
    """.split()
)
