"""Compounds, lots and stocks of a project. Entering a name again makes its next revision."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from django.urls import path
from django.utils.http import urlencode
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter
from rest_framework import serializers
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.schema import Amount, Quantity, operation
from kinetics_db.engine.units import convert
from kinetics_db.materials.selectors import compounds_with_newest, lots_in, stocks_in
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.projects.selectors import project_named

if TYPE_CHECKING:
    from kinetics_db.materials.models import (
        CompoundRevision,
        LotRevision,
        MaterialRevision,
        StockRevision,
    )


class Revision(serializers.Serializer):
    """Which revision is shown, and who wrote it."""

    revision = serializers.IntegerField(read_only=True)
    digest = serializers.CharField(read_only=True)
    created = serializers.DateTimeField(read_only=True)
    created_by = serializers.CharField(read_only=True)
    reason = serializers.CharField(required=False)


class CompoundSchema(Revision):
    """A substance."""

    name = serializers.CharField(max_length=80)
    formula = serializers.CharField(required=False)
    molar_mass = serializers.FloatField(required=False, allow_null=True, help_text="g/mol")
    density = Quantity(required=False, allow_null=True)
    hazard_statements = serializers.ListField(
        child=serializers.CharField(), required=False, help_text="H codes"
    )


class LotSchema(Revision):
    """A bottle of a compound."""

    code = serializers.CharField(max_length=80)
    compound = serializers.CharField()
    purity = serializers.FloatField(required=False, help_text="mass fraction")
    purity_uncertainty = serializers.FloatField(required=False, help_text="standard uncertainty")
    supplier_note = serializers.CharField(required=False)


class PortionSchema(serializers.Serializer):
    """What went into a stock: a lot or a compound."""

    lot = serializers.CharField(required=False)
    compound = serializers.CharField(required=False)
    amount = Amount()


class ComponentSchema(serializers.Serializer):
    """What came out."""

    compound = serializers.CharField()
    concentration = Amount()


class NewStock(Revision):
    """A stock solution to be made up."""

    code = serializers.CharField(max_length=80)
    portions = PortionSchema(many=True)
    volume = Amount(help_text="the volume made up to")
    solvent = serializers.CharField(required=False)
    made_on = serializers.CharField(required=False, help_text="ISO date")
    temperature = Quantity(required=False, allow_null=True)


class StockSchema(Revision):
    """A stock solution with the concentrations that its recipe gives."""

    code = serializers.CharField()
    components = ComponentSchema(many=True)
    volume = Amount()
    solvent = serializers.CharField()
    made_on = serializers.CharField()
    temperature = Quantity(allow_null=True)


class _Materials(ApiView):
    """One kind of material of a project."""

    name: str
    field: str
    newest: Callable[..., Any]

    def answer(self, request: Request, slug: str, shown: Callable[[Any], dict[str, Any]]) -> Response:
        given = self.params(request, self.name, paged=True)
        project = project_named(user=request.user, slug=slug)
        found = type(self).newest(user=request.user, project_id=project.pk)
        if self.name in given:
            found = found.filter(**{self.field: given[self.name]})
        return self.listed(
            request, found, order=(self.field, "id"), shown=lambda rows: [shown(row) for row in rows]
        )

    def entered(self, request: Request, plain: dict[str, Any]) -> Response:
        location = f"{request.path}?{urlencode({self.name: plain[self.name]})}"
        return self.created(plain, location=location)


def _one(name: str) -> OpenApiParameter:
    return OpenApiParameter(name, OpenApiTypes.STR, description=f"only the one of this {name}")


class Compounds(_Materials):
    """Compounds."""

    name, field, newest = "name", "compound__name", staticmethod(compounds_with_newest)

    @operation(
        "list_compounds", tag="materials", summary="Compounds of a project, newest revisions, by name",
        params=[_one("name")], answers=CompoundSchema, paged=True,
    )  # fmt: skip
    def get(self, request: Request, slug: str) -> Response:
        return self.answer(request, slug, _compound)

    @operation(
        "enter_compound", tag="materials", summary="Enter a compound, or its next revision",
        status=201, takes=CompoundSchema, answers=CompoundSchema, keyed=True,
    )  # fmt: skip
    def post(self, request: Request, slug: str) -> Response:
        body = Body.of(request)
        texts = {name: body.text(name) for name in ("formula", "reason")}
        name, molar_mass = body.text("name", required=True), body.number("molar_mass")
        density, hazards = body.quantity("density"), body.texts("hazard_statements")
        body.done()
        revision = enter_compound(
            user=request.user,
            project_id=project_named(user=request.user, slug=slug).pk,
            name=name,
            molar_mass=molar_mass,
            density=None if density is None else (density.value, density.unit),
            hazard_statements=hazards,
            **texts,
        )
        return self.entered(request, _compound(revision))


class Lots(_Materials):
    """Lots."""

    name, field, newest = "code", "lot__code", staticmethod(lots_in)

    @operation(
        "list_lots", tag="materials", summary="Lots of a project, newest revisions, by code",
        params=[_one("code")], answers=LotSchema, paged=True,
    )  # fmt: skip
    def get(self, request: Request, slug: str) -> Response:
        return self.answer(request, slug, _lot)

    @operation(
        "enter_lot", tag="materials", summary="Enter a lot, or its next revision",
        status=201, takes=LotSchema, answers=LotSchema, keyed=True,
    )  # fmt: skip
    def post(self, request: Request, slug: str) -> Response:
        body = Body.of(request)
        texts = {name: body.text(name, required=True) for name in ("code", "compound")}
        texts |= {name: body.text(name) for name in ("supplier_note", "reason")}
        purity, uncertainty = body.number("purity", 1.0), body.number("purity_uncertainty", 0.0)
        body.done()
        assert purity is not None and uncertainty is not None
        revision = enter_lot(
            user=request.user,
            project_id=project_named(user=request.user, slug=slug).pk,
            purity=purity,
            purity_uncertainty=uncertainty,
            **texts,
        )
        return self.entered(request, _lot(revision))


class Stocks(_Materials):
    """Stock solutions."""

    name, field, newest = "code", "stock__code", staticmethod(stocks_in)

    @operation(
        "list_stocks", tag="materials", summary="Stocks of a project, newest revisions, by code",
        params=[_one("code")], answers=StockSchema, paged=True,
    )  # fmt: skip
    def get(self, request: Request, slug: str) -> Response:
        return self.answer(request, slug, _stock)

    @operation(
        "make_up_stock", tag="materials", summary="Make up a stock, or its next revision",
        status=201, takes=NewStock, answers=StockSchema, keyed=True,
    )  # fmt: skip
    def post(self, request: Request, slug: str) -> Response:
        body = Body.of(request)
        texts = {name: body.text(name) for name in ("solvent", "made_on", "reason")}
        code, volume = (
            body.text("code", required=True),
            body.quantity("volume", required=True, uncertain=True),
        )
        temperature = body.quantity("temperature")
        portions = [_portion(part) for part in body.objects("portions")]
        body.done()
        assert volume is not None
        revision = make_up_stock(
            user=request.user,
            project_id=project_named(user=request.user, slug=slug).pk,
            code=code,
            portions=[portion for portion in portions if portion is not None],
            volume=(volume.value, volume.unit),
            volume_uncertainty=volume.uncertainty,
            temperature=None if temperature is None else float(convert(*temperature[:2], "K")),
            **texts,
        )
        return self.entered(request, _stock(revision))


def _portion(part: Body) -> Portion | None:
    amount = part.quantity("amount", required=True, uncertain=True)
    lot, compound = part.text("lot"), part.text("compound")
    if amount is None:
        return None
    return Portion(amount.value, amount.unit, lot or None, compound or None, amount.uncertainty)


def _revision(revision: MaterialRevision) -> dict[str, Any]:
    return {
        "revision": revision.number,
        "digest": revision.digest,
        "created": revision.created,
        "created_by": revision.created_by.get_username(),
        "reason": revision.reason,
    }


def _compound(revision: CompoundRevision) -> dict[str, Any]:
    content = revision.content
    density = content["density"]
    return {
        **{name: content[name] for name in ("name", "formula", "molar_mass", "hazard_statements")},
        "density": None if density is None else {"value": density, "unit": "g/L"},
        **_revision(revision),
    }


def _lot(revision: LotRevision) -> dict[str, Any]:
    content = revision.content
    return {
        **{name: content[name] for name in ("code", "purity", "supplier_note")},
        "compound": revision.lot.compound.name,
        "purity_uncertainty": content["purity_u"],
        **_revision(revision),
    }


def _stock(revision: StockRevision) -> dict[str, Any]:
    content = revision.content
    volume, kelvin = content["volume"], content["temperature"]
    return {
        **{name: content[name] for name in ("code", "solvent", "made_on")},
        "volume": {"value": volume["value"], "unit": volume["unit"], "uncertainty": volume["u"]},
        "temperature": None if kelvin is None else {"value": kelvin, "unit": "K"},
        "components": [
            {
                "compound": part["compound"],
                "concentration": {
                    "value": part["concentration"],
                    "unit": "mol/L",
                    # A stock's causes of error are independent (JCGM 100:2008, 5.1.2).
                    "uncertainty": part["concentration"]
                    * math.hypot(*(cause["relative_u"] for cause in part["shared"])),
                },
            }
            for part in content["components"]
        ],
        **_revision(revision),
    }


urlpatterns = [
    path("projects/<slug:slug>/compounds/", Compounds.as_view(), name="compounds"),
    path("projects/<slug:slug>/lots/", Lots.as_view(), name="lots"),
    path("projects/<slug:slug>/stocks/", Stocks.as_view(), name="stocks"),
]
