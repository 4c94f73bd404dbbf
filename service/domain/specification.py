"""A specification: target vector, reference covariance, significance level, and how to treat the data."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Literal

import numpy as np

from service.domain.faults import refuse_any, repeated
from service.errors import Fault, IllConditionedError, NotPositiveDefiniteError
from service.signing import canonical
from service.stats.arrays import Matrix, Vector, frozen
from service.stats.covariance import Covariance, factor_covariance

CovarianceKind = Literal["known", "reference", "batch", "pooled"]
OnFailure = Literal["hold", "note", "sign-flip"]

SCREEN_NAMES = (
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
"""Every screen, in the order in which records list them."""

JOINT_NORMALITY = frozenset({"mardia-skewness", "mardia-kurtosis", "henze-zirkler"})
"""Screens whose failure a sign-flip test can answer."""

MADE_WHEN_ASKED = frozenset({"outlying-robust"})
"""Screens that cost more than all the others together, made only where the specification names them."""

# These explain, and hold a lot only where the specification says so.
_NOTED_BY_DEFAULT = frozenset({"marginal-normality", "resolution"})
_SMALLEST_VARIANCE = 1e-100
_FARTHEST = 1e50
_SYMMETRY = 1e-12


@dataclass(frozen=True, slots=True)
class ScreenRule:
    """How one screen is applied.

    Parameters
    ----------
    level : float
        Significance level of the screen.
    on_failure : {"hold", "note", "sign-flip"}
        What a screen that is not met does.
    required : bool
        Whether a screen that cannot be computed holds the lot.
    listed : bool
        Whether the specification names the screen.
    """

    level: float = 0.01
    on_failure: OnFailure = "hold"
    required: bool = False
    listed: bool = False


@dataclass(frozen=True, slots=True)
class Question:
    """What is asked of the mean: whether it differs, or whether it is close enough.

    Parameters
    ----------
    form : {"difference", "equivalence"}
        The null hypothesis is agreement, or departure.
    delta : float or None
        Equivalence: the largest Mahalanobis shift that does not matter.
    required_shift, required_power : float or None
        Difference: acceptance counts only where this shift would be found with this power.
    """

    form: Literal["difference", "equivalence"]
    delta: float | None = None
    required_shift: float | None = None
    required_power: float | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Specification:
    """One version of the rule by which lots are judged.

    Parameters
    ----------
    code : str
        Name under which versions are kept.
    names, measurement_units : tuple of str
        Of the p characteristics.
    target : ndarray, shape (p,)
        The approved mean vector mu0, in units of measurement.
    lower_bounds, upper_bounds : ndarray, shape (p,)
        Physical bounds of a single value; where none is declared, 1e50 reference standard deviations
        from the target, beyond which no statistic has a double, or infinite without a reference.
    tolerances : ndarray, shape (p,), or None
        Largest difference of each mean that does not matter (equivalence by box).
    covariance_kind : str
        ``known``, ``reference``, ``batch`` or ``pooled``.
    sigma0 : Covariance or None
        Reference covariance, factored; None where the batch brings its own.
    target_units : float
        Units m behind an estimated target; infinite for a fixed requirement.
    significance_level : float
        Level alpha of the decision.
    question : Question
        Form of the question.
    screens : mapping of str to ScreenRule
        A rule for every screen name.
    missing : {"refuse", "hold"}
        What a missing cell does.
    document : mapping
        The specification in its canonical form.
    digest : str
        SHA-256, in hexadecimal, of the canonical form (RFC 8785).
    """

    code: str
    names: tuple[str, ...]
    measurement_units: tuple[str, ...]
    target: Vector
    lower_bounds: Vector
    upper_bounds: Vector
    tolerances: Vector | None
    covariance_kind: CovarianceKind
    sigma0: Covariance | None
    target_units: float
    significance_level: float
    question: Question
    screens: Mapping[str, ScreenRule]
    missing: Literal["refuse", "hold"]
    document: Mapping[str, Any]
    digest: str

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Specification:
        """Make a specification of a document that has the right shape.

        Parameters
        ----------
        data : mapping
            As loaded by ``schemas.specification.SpecificationSchema``.

        Returns
        -------
        Specification
            With its covariance factored.

        Raises
        ------
        InvalidContentError
            With every fault: repeated names, targets outside bounds, a matrix
            that is not symmetric, not positive definite or ill-conditioned, too
            few degrees of freedom, an incomplete equivalence question.
        """
        characteristics = data["characteristics"]
        sigma0, faults = _covariance(data["covariance"], len(characteristics))
        refuse_any(_faults(data) + faults, "specification")
        tolerances = [item.get("tolerance") for item in characteristics]
        covariance = data["covariance"]
        target = frozen([item["target"] for item in characteristics])
        reach = np.inf if sigma0 is None else _FARTHEST * sigma0.scale
        return cls(
            code=data["code"],
            names=tuple(item["name"] for item in characteristics),
            measurement_units=tuple(item["measurement_unit"] for item in characteristics),
            target=target,
            lower_bounds=np.maximum(_bounds(characteristics, "lower_bound", -math.inf), target - reach),
            upper_bounds=np.minimum(_bounds(characteristics, "upper_bound", math.inf), target + reach),
            tolerances=None if None in tolerances else frozen([float(t) for t in tolerances]),
            covariance_kind=covariance["kind"],
            sigma0=sigma0,
            target_units=float(covariance.get("target_units") or math.inf),
            significance_level=data["significance_level"],
            question=_question(data["question"]),
            screens=_screen_rules(data.get("screens") or {}),
            missing=data.get("missing") or "refuse",
            document=data,
            digest=canonical.digest(data),
        )

    @property
    def dimension(self) -> int:
        """Number p of characteristics."""
        return len(self.names)


def _bounds(characteristics: list[Mapping[str, Any]], member: str, absent: float) -> Vector:
    values = [item.get(member) for item in characteristics]
    return frozen([absent if value is None else value for value in values])


def _question(data: Mapping[str, Any]) -> Question:
    wanted = data.get("required_power") or {}
    return Question(data["form"], data.get("delta"), wanted.get("shift"), wanted.get("power"))


def _screen_rules(data: Mapping[str, Mapping[str, Any]]) -> Mapping[str, ScreenRule]:
    rules = {}
    for name in SCREEN_NAMES:
        given = data.get(name)
        usual: OnFailure = "note" if name in _NOTED_BY_DEFAULT else "hold"
        settings = given or {}
        rules[name] = ScreenRule(
            level=settings.get("level", 0.01),
            on_failure=settings.get("on_failure", usual),
            required=settings.get("required", False),
            listed=given is not None,
        )
    return MappingProxyType(rules)


def _covariance(data: Mapping[str, Any], p: int) -> tuple[Covariance | None, list[Fault]]:
    if data["kind"] == "batch":
        return None, []
    matrix = frozen(data["matrix"])
    faults = _matrix_faults(matrix, p)
    dof = float(data.get("degrees_of_freedom") or math.inf)
    if data["kind"] == "reference" and dof < p:
        text = f"A reference covariance of {p} characteristics needs at least {p} degrees of freedom; it has {dof:g}."
        faults.append(Fault("/covariance/degrees_of_freedom", text, "too-few-degrees-of-freedom"))
    if faults:
        return None, faults
    try:
        return factor_covariance((matrix + matrix.T) / 2, dof, lasting=True), []
    except (NotPositiveDefiniteError, IllConditionedError) as error:
        return None, [Fault("/covariance/matrix", error.detail, error.code)]


def _matrix_faults(matrix: Matrix, p: int) -> list[Fault]:
    if matrix.shape != (p, p):
        shape = " x ".join(str(size) for size in matrix.shape)
        text = f"The covariance matrix is {shape}; {p} characteristics need {p} x {p}."
        return [Fault("/covariance/matrix", text, "matrix-shape")]
    faults = []
    for i in np.flatnonzero(np.diagonal(matrix) < _SMALLEST_VARIANCE):
        text = f"Variance {i + 1} is {matrix[i, i]:g}; a variance is positive, and not below {_SMALLEST_VARIANCE:g}."
        faults.append(Fault(f"/covariance/matrix/{i}/{i}", text, "variance-not-positive"))
    scale = np.sqrt(np.abs(np.diagonal(matrix)))
    for i, j in np.argwhere(np.abs(matrix - matrix.T) > _SYMMETRY * np.outer(scale, scale)):
        if i < j:
            text = f"Entry ({i + 1}, {j + 1}) is {matrix[i, j]:g}, but ({j + 1}, {i + 1}) is {matrix[j, i]:g}."
            faults.append(Fault(f"/covariance/matrix/{i}/{j}", text + " Make them equal.", "not-symmetric"))
    return faults


def _faults(data: Mapping[str, Any]) -> list[Fault]:
    characteristics = data["characteristics"]
    faults = repeated((item["name"] for item in characteristics), "/characteristics/{}/name", "characteristic")
    for j, item in enumerate(characteristics):
        lower, upper = item.get("lower_bound"), item.get("upper_bound")
        low, high = (-math.inf if lower is None else lower), (math.inf if upper is None else upper)
        if low >= high:
            text = f"The lower bound {low:g} of {item['name']} is not below its upper bound {high:g}."
            faults.append(Fault(f"/characteristics/{j}/lower_bound", text, "bounds-crossed"))
        elif not low <= item["target"] <= high:
            text = f"The target {item['target']:g} of {item['name']} lies outside its own bounds."
            faults.append(Fault(f"/characteristics/{j}/target", text, "target-out-of-bounds"))
    return faults + _question_faults(data) + _sign_flip_faults(data)


def _sign_flip_faults(data: Mapping[str, Any]) -> list[Fault]:
    text = "Sign flips answer doubts about joint normality only; give hold or note."
    return [
        Fault(f"/screens/{name}/on_failure", text, "sign-flip-not-here")
        for name, settings in (data.get("screens") or {}).items()
        if settings.get("on_failure") == "sign-flip" and name not in JOINT_NORMALITY
    ]


def _question_faults(data: Mapping[str, Any]) -> list[Fault]:
    if data["question"]["form"] != "equivalence" or data["question"].get("delta") is not None:
        return []
    return [
        Fault(
            f"/characteristics/{j}/tolerance",
            f"Equivalence without delta needs a tolerance for every characteristic; {item['name']} has none.",
            "tolerance-missing",
        )
        for j, item in enumerate(data["characteristics"])
        if item.get("tolerance") is None
    ]
