"""One tree of errors, grouped by who must act on them.

An outcome (accepted, rejected, held) is a result, never an error.  An error
says that no decision was made, what is wrong, where, and what to do about it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar, Self


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is wrong with what was sent, and where it stands.

    Parameters
    ----------
    pointer : str
        JSON Pointer (RFC 6901) into the body, ``""`` for the whole of it.
    detail : str
        What is wrong and how to mend it, for a person.
    code : str
        Stable kebab-case name, for a program.
    """

    pointer: str
    detail: str
    code: str

    def below(self, prefix: str) -> Fault:
        """Return the same fault seen from a document that holds this one at `prefix`."""
        return Fault(prefix + self.pointer, self.detail, self.code)

    def to_dict(self) -> dict[str, str]:
        """Return the member of ``errors`` in a problem object (RFC 9457)."""
        return {"pointer": self.pointer, "detail": self.detail, "code": self.code}


class ServiceError(Exception):
    """Root of every error this project raises on purpose.

    Parameters
    ----------
    detail : str
        One or two sentences for the person who must act.
    faults : sequence of Fault, optional
        Every single fault found, not only the first.
    """

    code: ClassVar[str] = "service-error"

    def __init__(self, detail: str, faults: Sequence[Fault] = ()) -> None:
        super().__init__(detail)
        self.detail = detail
        self.faults = tuple(faults)

    def below(self, prefix: str) -> Self:
        """Return the same error seen from a document that holds this one at `prefix`."""
        return type(self)(self.detail, [fault.below(prefix) for fault in self.faults])

    def at(self, pointer: str) -> Self:
        """Return the same error with itself as its one fault, at `pointer`."""
        return type(self)(self.detail, [Fault(pointer, self.detail, self.code)])


# --- The caller must act -----------------------------------------------------


class MalformedRequestError(ServiceError):
    """The body is not one strict JSON document."""

    code = "malformed-request"


class InvalidContentError(ServiceError):
    """The body is JSON, but its content breaks the schema or has no sound meaning."""

    code = "invalid-content"


class TooFewUnitsError(ServiceError):
    """The batch has too few units for the test that its specification asks for."""

    code = "too-few-units"


class UnauthenticatedError(ServiceError):
    """No valid token came with the request."""

    code = "unauthenticated"


class NotPermittedError(ServiceError):
    """The token is valid, but none of its roles may do this."""

    code = "not-permitted"


class NotFoundError(ServiceError):
    """There is nothing under this name, or nothing that this caller may see."""

    code = "not-found"


class IdempotencyConflictError(ServiceError):
    """The Idempotency-Key was used before with another body."""

    code = "idempotency-key-reused"


class PreconditionError(ServiceError):
    """The thing is not as the caller saw it last (``If-Match``)."""

    code = "precondition-failed"


# --- The statistician must act -----------------------------------------------


class NotPositiveDefiniteError(ServiceError):
    """A covariance matrix is not positive definite."""

    code = "not-positive-definite"


class IllConditionedError(ServiceError):
    """A covariance matrix is too close to singular for its inverse to mean anything."""

    code = "ill-conditioned"


class SpecificationStateError(ServiceError):
    """The step is not allowed in the specification's present state."""

    code = "specification-state"


class SelfApprovalError(ServiceError):
    """The author of a version tried to approve it."""

    code = "self-approval"


# --- The operator must act ---------------------------------------------------


class StoreUnavailableError(ServiceError):
    """The store cannot be reached, is behind this program, or is not as it was made."""

    code = "store-unavailable"


class KeyUnavailableError(ServiceError):
    """The signing key cannot be read, or its file is open to others."""

    code = "key-unavailable"


class ConfigurationError(ServiceError):
    """A setting is unknown or cannot be read."""

    code = "configuration"


# --- The auditor must act ----------------------------------------------------


class VerificationError(ServiceError):
    """A record is refuted: signature, form, digest or recomputation does not agree."""

    code = "verification-failed"


class SignatureMismatchError(VerificationError):
    """The signature does not belong to these bytes under a trusted key."""

    code = "signature-mismatch"


class RecomputationMismatchError(VerificationError):
    """The numbers in a record do not follow from its batch and specification."""

    code = "recomputation-mismatch"


class UnknownFormatError(ServiceError):
    """The record is of a format, or under a key, that this program cannot check."""

    code = "unknown-format"
