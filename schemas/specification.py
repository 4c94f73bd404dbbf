"""A specification on the wire, and the steps of its life."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from marshmallow import ValidationError, fields, validates_schema

from schemas.base import Shape
from schemas.fields import MAXIMUM_COLUMNS, Choice, Code, Count, Flag, Instant, Matrix, Name, Number, Text, entries

SMALLEST_LEVEL = 1e-12
"""Below this a level cannot be told from never rejecting, and critical values leave the range of a double."""

MOST_REFERENCE_DATA = 1e9
"""Nobody measures more units; a covariance better known than by these is of kind known."""

SCREENS = (
    "completeness",
    "resolution",
    "outlying-against-specification",
    "outlying-within-batch",
    "outlying-robust",
    "mardia-skewness",
    "mardia-kurtosis",
    "henze-zirkler",
    "marginal-normality",
    "dispersion",
    "order-dependence",
)


class CharacteristicSchema(Shape):
    """One characteristic with its target."""

    name = Name(required=True, longest=100)
    measurement_unit = Name(required=True, longest=50)
    target = Number(required=True)
    scale = Choice("linear")
    lower_bound = Number(metadata={"description": "Physical lower bound of a single value."})
    upper_bound = Number(metadata={"description": "Physical upper bound of a single value."})
    tolerance = Number(above=0, metadata={"description": "Equivalence: largest difference of the mean allowed."})


_NEEDED = {
    "known": {"matrix"},
    "reference": {"matrix", "degrees_of_freedom"},
    "batch": set[str](),
    "pooled": {"matrix", "degrees_of_freedom"},
}
_OPTIONAL = {"known": set[str](), "reference": {"target_units"}, "batch": set[str](), "pooled": {"target_units"}}


class CovarianceSchema(Shape):
    """The reference covariance, and what is known of it."""

    kind = Choice(
        "known",
        "reference",
        "batch",
        "pooled",
        required=True,
        metadata={
            "description": "known: exactly known. reference: estimated beforehand on degrees_of_freedom. batch: from "
            "the batch itself. pooled: reference and batch together."
        },
    )
    matrix = Matrix(metadata={"description": "p x p, symmetric, in products of the units of measurement."})
    degrees_of_freedom = Number(least=1, most=MOST_REFERENCE_DATA)
    target_units = Number(
        least=1,
        most=MOST_REFERENCE_DATA,
        metadata={"description": "Units behind an estimated target; absent where fixed."},
    )

    @validates_schema(pass_original=True, skip_on_field_errors=False)
    def _members_of_kind(self, data: dict[str, Any], original: object, **_: Any) -> None:
        """Ask for what the kind needs, and refuse what it does not take, beside any other fault."""
        kind = data.get("kind")
        if kind is None or not isinstance(original, Mapping):
            return
        given = set(original) & set(self.fields) - {"kind"}
        needed, allowed = _NEEDED[kind], _NEEDED[kind] | _OPTIONAL[kind]
        faults = {name: [f"A covariance of kind {kind!r} needs this."] for name in sorted(needed - given)}
        faults |= {name: [f"A covariance of kind {kind!r} takes no {name}."] for name in sorted(given - allowed)}
        if faults:
            raise ValidationError(faults)


class RequiredPowerSchema(Shape):
    """The power that an acceptance must have had."""

    shift = Number(required=True, above=0, metadata={"description": "In Mahalanobis units."})
    power = Number(required=True, above=0, below=1)


class QuestionSchema(Shape):
    """What is asked of the mean."""

    form = Choice("difference", "equivalence", required=True)
    required_power = fields.Nested(RequiredPowerSchema)
    delta = Number(above=0, metadata={"description": "Equivalence: largest Mahalanobis shift that does not matter."})

    @validates_schema(pass_original=True, skip_on_field_errors=False)
    def _members_of_form(self, data: dict[str, Any], original: object, **_: Any) -> None:
        """Refuse what belongs to the other form, beside any other fault."""
        other = {"difference": "delta", "equivalence": "required_power"}.get(data.get("form", ""))
        if other and isinstance(original, Mapping) and other in original:
            raise ValidationError(f"A question of form {data['form']!r} takes no {other}.", other)


class ScreenSchema(Shape):
    """How one screen is applied."""

    level = Number(least=SMALLEST_LEVEL, most=0.5)
    on_failure = Choice("hold", "note", "sign-flip")
    required = Flag()


class SpecificationSchema(Shape):
    """Target vector, reference covariance, significance level, and how the data are treated."""

    code = Code(required=True)
    title = Text(longest=200)
    characteristics = fields.List(fields.Nested(CharacteristicSchema), required=True, validate=entries(MAXIMUM_COLUMNS))
    covariance = fields.Nested(CovarianceSchema, required=True)
    significance_level = Number(required=True, least=SMALLEST_LEVEL, most=0.5)
    question = fields.Nested(QuestionSchema, required=True)
    screens = fields.Nested(Shape.from_dict({name: fields.Nested(ScreenSchema) for name in SCREENS}, name="Screens"))
    missing = Choice("refuse", "hold")


class ApprovalSchema(Shape):
    """An approver's step."""

    reason = Text(required=True, longest=2000)
    effective_at = Instant(metadata={"description": "From when the version governs; at once where left out."})


class WithdrawalSchema(Shape):
    """The end of a version."""

    reason = Text(required=True, longest=2000)


class SpecificationReferenceSchema(Shape):
    """A registered specification by its code."""

    code = Code(required=True)
    version = Count(metadata={"description": "Must be the governing version; leave it out to use that."})


SPECIFICATION_EXAMPLE = {
    "code": "premix-small",
    "title": "Mineral premix, iron and zinc only",
    "characteristics": [
        {"name": "iron", "measurement_unit": "mg/kg", "target": 600.0, "lower_bound": 0.0},
        {"name": "zinc", "measurement_unit": "mg/kg", "target": 450.0, "lower_bound": 0.0},
    ],
    "covariance": {"kind": "reference", "matrix": [[144.0, 81.0], [81.0, 81.0]], "degrees_of_freedom": 118},
    "significance_level": 0.01,
    "question": {"form": "difference"},
}
