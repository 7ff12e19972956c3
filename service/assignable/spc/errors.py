"""The errors of the domain: what is wrong, and where in the request's terms.

``SpcError``
 ├─ ``UnusableData``       the measurements cannot carry the calculation asked for
 ├─ ``UnusableParameter``  an option is out of its range, or does not fit the data
 └─ ``DocumentMismatch``   a limits document or a carry does not belong to what it is used with

An error knows no HTTP. It holds one :class:`Fault` for each thing that is wrong, so that a caller
can mend all of them at once; the edge turns each into an entry of a problem's ``errors``.
"""

from __future__ import annotations

from dataclasses import dataclass

Where = tuple[str | int, ...]


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is wrong.

    ``code`` is stable and hyphenated (``no-variation``); ``detail`` is a sentence a plant engineer
    can act on; ``where`` is a path in the request's own names (``("data", "values", 3, 1)``), with
    options at its root (``("sigma_multiple",)``).
    """

    code: str
    detail: str
    where: Where = ()


class SpcError(Exception):
    """A calculation that cannot be done; never raised itself."""

    def __init__(self, *faults: Fault) -> None:
        super().__init__("; ".join(fault.detail for fault in faults))
        self.faults = faults

    @classmethod
    def of(cls, code: str, detail: str, *where: str | int) -> SpcError:
        """An error with a single fault."""
        return cls(Fault(code, detail, where))


class UnusableData(SpcError):
    """The measurements cannot carry the calculation asked for."""


class UnusableParameter(SpcError):
    """An option is out of its range, or does not fit the data."""


class DocumentMismatch(SpcError):
    """A limits document or a carry does not belong to what it is used with."""
