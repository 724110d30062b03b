import json

import django.db.models.deletion
from django.db import migrations, models
from django.db.models import F


def take_from_newest_revisions(apps, schema_editor):
    """Control kind and repeated run from the newest revisions; runs in percent get conditions in percent."""
    Run = apps.get_model("runs", "Run")
    Revision = apps.get_model("runs", "RunRevision")
    Condition = apps.get_model("runs", "RunCondition")
    newest = Revision.objects.filter(number=F("run__latest_number")).values_list(
        "run_id", "run__project_id", "canonical"
    )
    for run_id, project_id, canonical in newest.iterator(chunk_size=500):
        content = json.loads(bytes(canonical))
        if content["control_kind"] or content["replicate_of"]:
            repeated = Run.objects.filter(project_id=project_id, code=content["replicate_of"]).first()
            Run.objects.filter(pk=run_id).update(control_kind=content["control_kind"], replicate_of=repeated)
        if content["basis"] == "relative":
            for condition in Condition.objects.filter(run_id=run_id, key__startswith="c0:"):
                condition.key = "percent:" + condition.key.removeprefix("c0:")
                condition.save(update_fields=["key"])


class Migration(migrations.Migration):

    dependencies = [
        ("runs", "0001_initial"),
    ]

    operations = [
        migrations.AddField(
            model_name="run",
            name="control_kind",
            field=models.CharField(blank=True, default="", max_length=80),
        ),
        migrations.AddField(
            model_name="run",
            name="replicate_of",
            field=models.ForeignKey(
                blank=True,
                null=True,
                on_delete=django.db.models.deletion.PROTECT,
                related_name="replicates",
                to="runs.run",
            ),
        ),
        migrations.AddIndex(
            model_name="run",
            index=models.Index(F("created").desc(), F("id").desc(), name="run_newest_anywhere"),
        ),
        migrations.RemoveIndex(model_name="runcondition", name="condition_search"),
        migrations.AddIndex(
            model_name="runcondition",
            index=models.Index(fields=["key", "value", "run"], name="condition_search"),
        ),
        # Last, since PostgreSQL refuses to change a table whose foreign keys wait for their check.
        migrations.RunPython(take_from_newest_revisions, migrations.RunPython.noop),
    ]
