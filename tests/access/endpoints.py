"""Every endpoint of REST with its methods: the role that each needs, and a request that only the role can spoil."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import timedelta
from typing import Any

from django.core.files.uploadedfile import SimpleUploadedFile
from django.test.client import BOUNDARY, MULTIPART_CONTENT, encode_multipart
from django.urls import reverse
from django.utils import timezone

from api.urls import urlpatterns

Keys = Mapping[str, Any]
METHODS = ("GET", "POST", "PUT", "PATCH", "DELETE")
FILE = b"t / s,A / mM\n0,10\n10,5\n20,2.5\n"
RECIPE = {
    "kind": "internal standard",
    "standard": {"signal": "ref", "species": "standard", "nuclei": 1, "noise": 1e-4},
    "standard_concentration": 0.05,
    "standard_owner": "standard",
    "signals": [{"signal": "H1", "species": "alcohol", "nuclei": 1, "noise": 0.004}],
}


@dataclass(frozen=True)
class Method:
    """What a method of an endpoint needs.

    ``needs`` is a role as for pages; 'nobody' is everyone, 'stranger' everyone who is logged in, 'person' everyone
    who acts without a token. ``gives`` are the statuses of who may, ``hidden`` the one of who may not know of it.
    """

    needs: str
    body: Callable[[Keys], Any] | None = None
    query: str = ""
    gives: tuple[int, ...] = (200,)
    hidden: int = 404
    writes: bool = False
    of_one_project: bool = True
    takes_match: bool = False


def reads(query: str = "", **more: Any) -> Method:
    return Method("reader", query=query, **more)


def writes(
    body: Callable[[Keys], Any] | None = None, *gives: int, needs: str = "contributor", **more: Any
) -> Method:
    return Method(needs, body, gives=gives or (201,), writes=True, **more)


def anybody(**more: Any) -> Method:
    return Method("stranger", of_one_project=False, **more)


PUBLIC = Method("nobody", of_one_project=False)

#: Name of the address -> method -> what it needs. A method that does not stand here is 405.
ENDPOINTS: dict[str, dict[str, Method]] = {
    "health": {"GET": PUBLIC},
    "schema": {"GET": PUBLIC},
    "docs": {"GET": PUBLIC},
    "projects": {
        "GET": anybody(),
        "POST": anybody(body=lambda k: {"slug": "third", "name": "A third"}, gives=(201,), writes=True),
    },
    "project": {"GET": reads()},
    "members": {"GET": reads()},
    "member": {
        "PUT": writes(lambda k: {"role": "contributor"}, 200, needs="owner"),
        "DELETE": writes(None, 204, needs="owner"),
    },
    "compounds": {"GET": reads(), "POST": writes(lambda k: {"name": "salt"})},
    "lots": {"GET": reads(), "POST": writes(lambda k: {"code": "L-9", "compound": "alcohol"})},
    "stocks": {
        "GET": reads(),
        "POST": writes(
            lambda k: {
                "code": "S-9",
                "volume": {"value": 1, "unit": "L"},
                "portions": [{"compound": "alcohol", "amount": {"value": 1, "unit": "g"}}],
            }
        ),
    },
    "runs": {"GET": anybody(), "POST": writes(lambda k: run_of(k, "K09"))},
    "run": {"GET": reads(), "PATCH": writes(lambda k: {"notes": "seen twice"}, 200, takes_match=True)},
    "run-revisions": {"GET": reads()},
    "run-revision": {"GET": reads()},
    "run-explanations": {"GET": reads()},
    "seal-run": {"POST": writes(None, 200)},
    "run-files": {
        "GET": reads(),
        "POST": writes(lambda k: {"file": SimpleUploadedFile("n.csv", FILE)}, query="?store=true"),
    },
    "file": {"GET": reads()},
    "file-content": {"GET": reads()},
    "signals": {"GET": reads()},
    "signal-numbers": {"GET": reads()},
    "run-tables": {
        "GET": reads(),
        "POST": writes(lambda k: {"signal_table": k["signal_table_id"], "name": "n", "recipe": RECIPE}),
    },
    "table": {"GET": reads()},
    "table-numbers": {"GET": reads()},
    "supersede-table": {"POST": writes(lambda k: {"newer": k["newer_table_id"], "reason": "better"}, 200)},
    "mechanisms": {
        "GET": reads("?project={slug}"),
        "POST": writes(lambda k: {"project": k["slug"], "name": "new", "text": "A --k--> B"}),
    },
    "check-mechanism": {"POST": anybody(body=lambda k: {"text": "A --k--> B"})},
    "versions": {"GET": reads(), "POST": writes(lambda k: {"text": "alcohol --k_9--> ketone"})},
    "version": {"GET": reads()},
    "simulate": {
        # A mechanism that one may not see is, in a body, a number that there is not.
        "POST": Method(
            "reader",
            lambda k: {
                "version": k["version_id"],
                "constants": {"k_ox": 1},
                "start": {"alcohol": 1},
                "times": [0, 1],
            },
            hidden=422,
        )
    },
    "datasets": {
        "GET": reads("?project={slug}"),
        "POST": writes(lambda k: {"project": k["slug"], "name": "new", "tables": [k["newer_table_id"]]}),
    },
    "dataset": {"GET": reads()},
    "dataset-table": {"GET": reads()},
    "fits": {"GET": reads("?project={slug}"), "POST": writes(lambda k: fit_of(k), 202, hidden=422)},
    "propose-fit": {
        "GET": reads("?dataset={dataset_id}&mechanism_version={version_id}", hidden=422),
    },
    "fit": {"GET": reads()},
    "fit-curves": {"GET": reads()},
    "fit-evidence": {"GET": reads()},
    "stop-fit": {"POST": writes(None, 200)},
    "retry-fit": {"POST": writes(None, 409)},  # a fit that waits need not be tried again
    "evidence": {"GET": reads("?project={slug}")},
    "tokens": {"GET": anybody(), "POST": Method("person", lambda k: token_of(), gives=(201,))},
    "withdraw-token": {"POST": Method("person", gives=(200,))},
    "elsewhere": {},
}


def run_of(keys: Keys, code: str) -> dict[str, Any]:
    charge = {"compound": "alcohol", "amount": {"value": 1, "unit": "mM"}}
    return {"project": keys["slug"], "code": code, "charges": [charge]}


def fit_of(keys: Keys) -> dict[str, Any]:
    constants = [{"name": "k_ox", "start": 0.5}]
    return {"dataset": keys["dataset_id"], "mechanism_version": keys["version_id"], "constants": constants}


def token_of() -> dict[str, Any]:
    return {"name": "new", "scope": "read", "expires": (timezone.now() + timedelta(days=9)).isoformat()}


def address(name: str, keys: Keys, query: str = "") -> str:
    """The address of an endpoint for the records of a project."""
    if name == "elsewhere":
        return "/api/v1/nowhere/"
    pattern = next(p for p in urlpatterns if p.name == name)
    kwargs = {key: keys[key] for key in pattern.pattern.converters}
    if name in ("stop-fit", "retry-fit"):
        kwargs["fit_id"] = keys["open_fit_id"]
    return reverse(f"api:{name}", kwargs=kwargs) + query.format(**keys)


def encoded(body: Any) -> tuple[bytes, str]:
    """A body with its media type: JSON, or a form where it holds a file."""
    if body is None:
        return b"", ""
    if "file" in body:
        return encode_multipart(BOUNDARY, body), MULTIPART_CONTENT
    return json.dumps(body).encode(), "application/json"
