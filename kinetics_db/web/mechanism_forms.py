"""The form of a mechanism version."""

from __future__ import annotations

from django import forms

from kinetics_db.web.forms import PlainForm

EXAMPLE = "A + B --k_1--> C\nC <--k_2 / k_3--> D"


class MechanismForm(PlainForm):
    """Name, text and note; what may stand in them is the service's."""

    name = forms.CharField(
        required=False,
        label="Name of the mechanism",
        help_text="A name that is here already gets its next version; a new name begins a new mechanism.",
    )
    text = forms.CharField(
        required=False,
        strip=False,
        label="Steps, one a line",
        widget=forms.Textarea(
            attrs={
                "class": "code",
                "rows": 14,
                "spellcheck": "false",
                "autocapitalize": "off",
                "autocomplete": "off",
                "placeholder": EXAMPLE,
            }
        ),
    )
    note = forms.CharField(
        required=False,
        label="Note",
        help_text="What is different from the version before, and why.",
        widget=forms.Textarea(attrs={"rows": 2}),
    )

    def clean_text(self) -> str:
        """Lines end as they do in files; browsers send another end."""
        return str(self.cleaned_data["text"]).replace("\r\n", "\n").replace("\r", "\n")
