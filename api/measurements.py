"""Instrument files as they came, and the signals read from them."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from django.conf import settings
from django.http import HttpResponse, QueryDict
from django.http.response import HttpResponseBase
from django.urls import path, reverse
from django.utils.http import content_disposition_header
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter
from rest_framework.renderers import BaseRenderer
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.etags import etag_of
from api.exceptions import BodyTooLarge, MalformedBody
from api.negotiation import Tabular, tabular
from api.numbers import AS_NUMBERS, FORM, NumbersView
from api.parsers import FileParser, strict_json
from api.queries import newest, truth_in
from api.schema import operation
from api.table_shapes import (
    FileRead,
    NewFile,
    ShownFile,
    ShownSignals,
    plain_files,
    plain_read,
    plain_signals,
)
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.exchange.tables import table_columns
from kinetics_db.measurements.selectors import (
    bytes_of,
    file_by_id,
    files_of_run,
    signal_table_by_id,
    signal_tables_of_run,
)
from kinetics_db.measurements.services import preview_file, store_file
from kinetics_db.projects.selectors import roles_remembered
from kinetics_db.runs.selectors import run_by_id

READER = "delimited text"
FIELDS = ("file", "name", "reader", "options")


class BytesRenderer(BaseRenderer):
    """Bytes as they are."""

    media_type = "application/octet-stream"
    format = "bytes"
    charset = None
    render_style = "binary"

    def render(self, data: Any, *args: Any, **kwargs: Any) -> bytes:
        return bytes(data)


class Files(ApiView):
    """Files of a run."""

    parser_classes = (FileParser,)

    @operation(
        "list_files", tag="measurements", summary="Instrument files of a run, the newest first",
        answers=ShownFile, paged=True,
    )  # fmt: skip
    def get(self, request: Request, run_id: int) -> Response:
        self.params(request, paged=True)
        with roles_remembered():
            run = run_by_id(user=request.user, run_id=run_id)
            files = files_of_run(user=request.user, run=run)
            return self.listed(request, files, order=("-created", "-id"), shown=plain_files)

    @operation(
        "read_file", tag="measurements", status=(200, 201), takes={"multipart/form-data": NewFile},
        answers=FileRead, keyed=True, summary="What is understood of an instrument's file; ?store=true keeps it",
        params=[OpenApiParameter("store", OpenApiTypes.BOOL, description="keep the bytes and the signals read")],
        description="Reads a file and says what was understood: 200, and nothing is kept. With store=true the bytes "
        "and the signal table are kept: 201 with the Location of the signal table, 200 when the same bytes were "
        "read in the same way before.",
    )  # fmt: skip
    def post(self, request: Request, run_id: int) -> Response:
        store = truth_in(self.params(request, "store"), "store")
        run = run_by_id(user=request.user, run_id=run_id)
        file, asked = _form(request)
        name, reader = asked.get("name") or file.name or "", asked.get("reader") or READER
        options = _options(asked.get("options", ""))
        data = file.read()
        result = preview_file(user=request.user, run=run, data=data, reader=reader, options=options)
        plain = plain_read(result, reader=reader, options=options)
        if not store:
            return Response(plain)
        before = newest(signal_tables_of_run(user=request.user, run=run))
        table = store_file(user=request.user, run=run, name=name, data=data, reader=reader, options=options)
        return self.created(
            {**plain, "file": table.file_id, "signal_table": table.pk},
            location=reverse("api:signals", kwargs={"signal_table_id": table.pk}),
            status=201 if table.pk > before else 200,
        )


class OneFile(ApiView):
    """A file."""

    @operation(
        "get_file", tag="measurements", summary="An instrument's file, without its bytes", answers=ShownFile
    )
    def get(self, request: Request, file_id: int) -> Response:
        self.params(request)
        with roles_remembered():
            run = file_by_id(user=request.user, file_id=file_id).run
            (plain,) = plain_files(files_of_run(user=request.user, run=run).filter(pk=file_id))
        return Response(plain)


class Content(ApiView):
    """The bytes of a file."""

    renderer_classes = (BytesRenderer,)

    @operation(
        "get_file_content", tag="measurements", summary="The bytes as the instrument wrote them",
        answers=OpenApiTypes.BINARY, media_types=("application/octet-stream",),
    )  # fmt: skip
    def get(self, request: Request, file_id: int) -> HttpResponseBase:
        self.params(request)
        file = file_by_id(user=request.user, file_id=file_id)

        def whole() -> HttpResponse:
            response = HttpResponse(bytes_of(file), content_type=BytesRenderer.media_type)
            response["Content-Disposition"] = content_disposition_header(True, file.name) or "attachment"
            return response

        return self.conditional(request, whole, etag_over=(file.stored.sha256, file.name), immutable=True)


class Signals(NumbersView):
    """A signal table."""

    @operation(
        "get_signals", tag="measurements", summary="A signal table, and how it was read",
        answers={**AS_NUMBERS, "application/json": ShownSignals},
        description="Without its numbers as JSON; with Accept: text/csv or application/vnd.apache.parquet the "
        "numbers.",
    )  # fmt: skip
    def get(self, request: Request, signal_table_id: int) -> HttpResponseBase:
        self.params(request)
        table = signal_table_by_id(user=request.user, signal_table_id=signal_table_id)
        if self.wants_numbers(request):
            return _numbers(self, request, table)
        return self.conditional(
            request, lambda: plain_signals(table), etag_over=("signals", table.pk, table.digest)
        )


class SignalNumbers(NumbersView):
    """The numbers of a signal table."""

    @operation(
        "get_signal_numbers", tag="measurements", summary="Times and signals, as .csv, .parquet or .json",
        answers=AS_NUMBERS, params=[FORM],
    )  # fmt: skip
    def get(self, request: Request, signal_table_id: int, form: str) -> HttpResponseBase:
        self.params(request)
        return _numbers(self, request, signal_table_by_id(user=request.user, signal_table_id=signal_table_id))


def _numbers(view: ApiView, request: Request, table: Any) -> HttpResponseBase:
    about = {"signal_table": table.pk, "run": table.file.run.code, "digest": table.digest}
    return view.conditional(
        request,
        lambda: tabular(request, Tabular(table_columns(table.table), about)),
        etag=etag_of(request.accepted_renderer.format, "numbers", table.pk, table.digest),
        immutable=True,
    )


def _form(request: Request) -> tuple[Any, dict[str, str]]:
    """The file and the texts beside it; InvalidInput for what is missing, too much or unknown."""
    sent, texts = request.FILES.getlist("file"), {}
    problems = []
    if len(sent) != 1:
        message = "is missing" if not sent else f"{len(sent)} files"
        problems.append(Problem(message, field="file", cure="one file, as multipart/form-data"))
    # Without a single byte there is no form, whatever the media type.
    for field, values in request.data.lists() if isinstance(request.data, QueryDict) else ():
        if field not in FIELDS:
            problems.append(Problem("unknown name", field=field[:80], cure=", ".join(FIELDS)))
        elif field != "file" and (len(values) != 1 or not isinstance(values[0], str)):
            problems.append(Problem("not one text", field=field, cure="one text"))
        elif field != "file":
            texts[field] = values[0]
    if problems:
        raise InvalidInput(problems)
    if (sent[0].size or 0) > settings.MAX_FILE_BYTES:
        raise BodyTooLarge(settings.MAX_FILE_BYTES)
    return sent[0], texts


def _options(text: str) -> dict[str, Any]:
    """The reader's options; a mistake has its place in their own text."""
    if not text.strip():
        return {}
    try:
        return strict_json(text.encode(errors="surrogatepass"))
    except MalformedBody as error:
        raise InvalidInput([replace(p, field="options") for p in error.problems]) from error


urlpatterns = [
    path("runs/<int:run_id>/files/", Files.as_view(), name="run-files"),
    path("files/<int:file_id>/", OneFile.as_view(), name="file"),
    path("files/<int:file_id>/content/", Content.as_view(), name="file-content"),
    path("signals/<int:signal_table_id>/", Signals.as_view(), name="signals"),
    path("signals/<int:signal_table_id>.<str:form>", SignalNumbers.as_view(), name="signal-numbers"),
]
