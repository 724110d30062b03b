"""Addresses of the pages: each module of views lists its own."""

from kinetics_db.web.views import (
    account,
    datasets,
    evidence,
    files,
    fits,
    home,
    materials,
    mechanisms,
    members,
    project,
    run_entry,
    runs,
    search,
    tables,
    tokens,
)

app_name = "web"
urlpatterns = [
    *home.urlpatterns,
    *search.urlpatterns,
    *account.urlpatterns,
    *tokens.urlpatterns,
    *project.urlpatterns,
    *members.urlpatterns,
    *materials.urlpatterns,
    *run_entry.urlpatterns,
    *runs.urlpatterns,
    *files.urlpatterns,
    *tables.urlpatterns,
    *mechanisms.urlpatterns,
    *datasets.urlpatterns,
    *fits.urlpatterns,
    *evidence.urlpatterns,
]
