"""The Idempotency-Key header: a writing POST that is sent again gets its first answer and is not done again."""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Callable
from typing import Any

from django.db import transaction
from django.http import HttpResponse, QueryDict
from django.http.response import HttpResponseBase
from rest_framework.renderers import JSONRenderer
from rest_framework.request import Request
from rest_framework.response import Response

from kinetics_db.accounts.idempotency import Answer, claim_key, forget_old_keys, keep_answer
from kinetics_db.errors import InvalidInput

HEADER = "Idempotency-Key"
REPLAYED = "Idempotency-Replayed"
KEY = re.compile(r"[\x21-\x7e]{1,255}\Z")
KEPT_HEADERS = ("Location", "ETag", "Link", "Cache-Control", "Retry-After")


def answered_once(
    post: Callable[..., HttpResponseBase], request: Request, *args: Any, **kwargs: Any
) -> HttpResponseBase:
    """Do a POST in one transaction with its key, or give the answer that it got before.

    Only what succeeded is remembered: an error leaves no key behind, so the request may be mended and sent again.
    """
    key = request.headers[HEADER]
    if not KEY.match(key):
        raise InvalidInput("not a key", field=HEADER, cure="1 to 255 visible ASCII characters without blanks")
    digest = _digest(request)
    forget_old_keys()
    with transaction.atomic():
        name = f"{request.method} {request.path}"
        earlier = claim_key(user=request.user, key=key, request=name, request_digest=digest)
        if earlier is not None:
            return _again(earlier)
        response = post(request, *args, **kwargs)
        if response.status_code >= 400:
            transaction.set_rollback(True)
        else:
            keep_answer(user=request.user, key=key, answer=_kept(response))
    return response


def _digest(request: Request) -> str:
    """SHA-256 over method, address, limits of the token and body; of a form over its fields and files."""
    limits = getattr(request.user, "limits", None)
    over = hashlib.sha256(
        repr((request.method, request.get_full_path(), limits and (limits.scope, limits.project_id))).encode()
    )
    data, files = request.data, request.FILES
    pairs = data.lists() if isinstance(data, QueryDict) else data.items()
    fields = {name: value for name, value in pairs if name not in files}
    over.update(json.dumps(fields, sort_keys=True).encode())
    for name in sorted(files):
        for file in files.getlist(name):
            over.update(repr((name, file.name, file.size)).encode())
            for chunk in file.chunks():
                over.update(chunk)
            file.seek(0)
    return over.hexdigest()


def _kept(response: HttpResponseBase) -> Answer:
    headers = {name: response[name] for name in KEPT_HEADERS if name in response}
    body = JSONRenderer().render(response.data) if isinstance(response, Response) else b""
    return Answer(response.status_code, headers, body)


def _again(answer: Answer) -> HttpResponse:
    headers = {**answer.headers, REPLAYED: "true"}
    return HttpResponse(answer.body, status=answer.status, headers=headers, content_type="application/json")
