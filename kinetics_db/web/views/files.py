"""Instrument files: what is understood of one before it is stored, and the bytes as they came."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from django.contrib import messages
from django.core.files.uploadedfile import UploadedFile
from django.http import HttpResponse, HttpResponseBase
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.measurements.incoming import Held, held_bytes, hold_bytes, let_go
from kinetics_db.measurements.likeness import reading_that_fits, readings_like
from kinetics_db.measurements.selectors import bytes_of, file_by_id
from kinetics_db.measurements.services import store_file
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.runs.selectors import run_by_id
from kinetics_db.web.downloads import FOR_GOOD, as_attachment, known_already, marked
from kinetics_db.web.file_forms import UploadForm
from kinetics_db.web.forms import problem_words
from kinetics_db.web.pages import ReadersRequest, download, form_page
from kinetics_db.web.reading_attempt import Attempt
from kinetics_db.web.views import signals

if TYPE_CHECKING:
    from kinetics_db.measurements.models import SignalTable
    from kinetics_db.runs.models import Run

NOT_ACCEPTED, TOO_LARGE = 422, 413


@form_page
def new_file(request: ReadersRequest, run_id: int) -> HttpResponse:
    """Choose a file, see what was understood, correct it, store it. ``do`` is what the pressed button asks."""
    run = run_by_id(user=request.user, run_id=run_id)
    require_contributor(user=request.user, project_id=run.project_id)
    if request.method != "POST":
        return _asking(request, run, UploadForm())
    sent = request.FILES.get("file")
    if isinstance(sent, UploadedFile):
        return _uploaded(request, run, sent)
    token = request.POST.get("held", "")
    if not token:
        return _asked_again(request, run, "No file is chosen: choose the one that the instrument wrote")
    try:
        held = held_bytes(user=request.user, run=run, token=token)
        data = held.read()
    except NotFound as error:
        return _asked_again(request, run, f"Choose it again: {error}")
    return ANSWERS.get(request.POST.get("do", ""), _previewed)(request, run, held, data)


def _uploaded(request: ReadersRequest, run: Run, sent: UploadedFile) -> HttpResponse:
    """Hold the bytes and show what is understood of them, read as an earlier file alike where that helps."""
    name = sent.name or ""
    try:
        held = hold_bytes(user=request.user, run=run, chunks=sent.chunks(), size=sent.size)
    except InvalidInput as error:
        return _asked_again(request, run, problem_words(error.problems[0]), status=TOO_LARGE)
    data = held.read()
    if "encoding" in request.POST:  # the form was filled already when the bytes had to be chosen again
        return _answer(request, run, held, data, Attempt.sent(request.POST, name=name))
    offered = readings_like(user=request.user, project_id=run.project_id, name=name)
    like = reading_that_fits(offered, name=name, data=data)
    attempt = Attempt.with_options(like.reader_options if like else {}, name=name)
    return _answer(request, run, held, data, attempt, offered=offered, like=like)


def _previewed(request: ReadersRequest, run: Run, held: Held, data: bytes) -> HttpResponse:
    return _answer(request, run, held, data, Attempt.sent(request.POST))


def _read_alike(request: ReadersRequest, run: Run, held: Held, data: bytes) -> HttpResponse:
    """Take the options of the earlier file that was chosen; of none, when it is not among those offered."""
    name = request.POST.get("name", "")
    offered = readings_like(user=request.user, project_id=run.project_id, name=name)
    like = next((table for table in offered if str(table.pk) == request.POST.get("like")), None)
    attempt = Attempt.with_options(like.reader_options if like else {}, name=name)
    return _answer(request, run, held, data, attempt, offered=offered, like=like)


def _stored(request: ReadersRequest, run: Run, held: Held, data: bytes) -> HttpResponse:
    """Store the file as the form says; what cannot be stored comes back with what is wrong."""
    attempt = Attempt.sent(request.POST)
    options = attempt.options(data)
    if options is not None:
        try:
            table = store_file(user=request.user, run=run, name=attempt.name, data=data, options=options)
        except InvalidInput as error:
            refused = error
        else:
            let_go(held)
            messages.success(
                request, f"'{table.file.name}' is stored as it came, and the signals read from it."
            )
            return redirect("web:signals", table.pk)
        attempt = Attempt.sent(request.POST)
        attempt.read(user=request.user, run=run, data=data)
        if attempt.result is not None:  # else reading has found the same problems
            attempt.show(refused)
        return _shown(request, run, held, attempt)
    return _shown(request, run, held, attempt)


ANSWERS: dict[str, Callable[[ReadersRequest, Run, Held, bytes], HttpResponse]] = {
    "preview": _previewed,
    "like": _read_alike,
    "store": _stored,
}


def _answer(
    request: ReadersRequest,
    run: Run,
    held: Held,
    data: bytes,
    attempt: Attempt,
    *,
    offered: Sequence[SignalTable] | None = None,
    like: SignalTable | None = None,
) -> HttpResponse:
    attempt.read(user=request.user, run=run, data=data)
    return _shown(request, run, held, attempt, offered=offered, like=like)


def _shown(
    request: ReadersRequest,
    run: Run,
    held: Held,
    attempt: Attempt,
    *,
    offered: Sequence[SignalTable] | None = None,
    like: SignalTable | None = None,
) -> HttpResponse:
    if offered is None:
        offered = readings_like(user=request.user, project_id=run.project_id, name=attempt.name)
    context = {
        "project": run.project, "run": run, "held": held.token, "attempt": attempt, "form": attempt.form,
        "offered": offered, "like": like,
    }  # fmt: skip
    if request.htmx:  # a look while the form is filled in, no submission
        return render(request, "web/files/reading.html", context)
    return render(request, "web/files/new.html", context, status=NOT_ACCEPTED if attempt.is_wrong else 200)


def _asked_again(
    request: ReadersRequest, run: Run, message: str, *, status: int = NOT_ACCEPTED
) -> HttpResponse:
    """Ask for the file, with what is wrong; options that were stated already stay."""
    upload = UploadForm(request.POST, {})
    upload.add_error("file", message)
    return _asking(request, run, upload, status=status)


def _asking(request: ReadersRequest, run: Run, upload: UploadForm, *, status: int = 200) -> HttpResponse:
    attempt = Attempt.sent(request.POST) if "encoding" in request.POST else None
    context = {
        "project": run.project, "run": run, "upload": upload, "attempt": attempt,
        "form": attempt.form if attempt else None,
    }  # fmt: skip
    template = "web/files/reading.html" if request.htmx and attempt else "web/files/new.html"
    return render(request, template, context, status=status)


@download
def file(request: ReadersRequest, file_id: int) -> HttpResponseBase:
    """The original bytes, to be saved and never shown by the browser: they are somebody's upload."""
    found = file_by_id(user=request.user, file_id=file_id)
    tag = found.stored.sha256
    if known := known_already(request, tag):
        return known
    response = HttpResponse(bytes_of(found), content_type="application/octet-stream")
    return marked(as_attachment(response, found.name), tag, keep=FOR_GOOD)


urlpatterns = [
    path("runs/<int:run_id>/files/new/", new_file, name="new-file"),
    path("files/<int:file_id>/", file, name="file"),
    *signals.urlpatterns,
]
