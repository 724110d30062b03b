"""Writing mechanism versions."""

from __future__ import annotations

from kinetics_db.accounts.models import User
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.network import canonical_form, parse_mechanism
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.mechanisms.models import Mechanism, MechanismVersion
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import note_write, recording, save_record


def write_version(*, user: User, project_id: int, name: str, text: str, note: str = "") -> MechanismVersion:
    """Store a text as the next version of the named mechanism.

    A text whose canonical form the mechanism already has gives that version back. InvalidInput holds every
    problem of the text with line and column; nothing is stored then.
    """
    require_contributor(user=user, project_id=project_id)
    name = plain_text(name, field="name", what="a mechanism", longest=120, required=True)
    note = plain_text(note, field="note", lines=True)
    content = canonical_form(parse_mechanism(text))
    with recording(user=user):
        lock_project(project_id)
        mechanism, made = Mechanism.objects.get_or_create(project_id=project_id, name=name)
        if made:
            note_write(
                verb="made",
                record_kind="mechanism",
                record_id=mechanism.pk,
                project_id=project_id,
                label=name,
            )
        same = mechanism.versions.filter(digest=digest(content)).first()
        if same is not None:
            return same
        latest = mechanism.versions.order_by("-number").first()
        version = MechanismVersion(
            mechanism=mechanism, number=(latest.number if latest else 0) + 1, text=text, note=note
        )
        return save_record(
            version,
            user=user,
            content=content,
            parents=[latest] if latest else [],
            project_id=project_id,
            label=f"{name} v{version.number}",
            digest_before=latest.digest if latest else "",
        )
