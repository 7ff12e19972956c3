"""The one bibliography: docstrings and answers cite its keys, ``/v1/methods`` serves it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Annotated


@dataclass(frozen=True, slots=True)
class Reference:
    """A published source."""

    key: Annotated[str, "The name by which docstrings and answers cite it."]
    authors: Annotated[str, "Who wrote or issued it."]
    year: Annotated[int, "Year of publication."]
    title: Annotated[str, "Its title."]
    published: Annotated[str, "Where it was published."]


_LISTED = (
    Reference(
        "shewhart-1931",
        "Shewhart, W. A.",
        1931,
        "Economic control of quality of manufactured product",
        "Van Nostrand, New York",
    ),
    Reference(
        "western-electric-1956",
        "Western Electric Company",
        1956,
        "Statistical quality control handbook",
        "Western Electric Company, Indianapolis",
    ),
    Reference(
        "nelson-1984",
        "Nelson, L. S.",
        1984,
        "The Shewhart control chart: tests for special causes",
        "Journal of Quality Technology 16(4), 237-239",
    ),
    Reference(
        "iso-7870-2",
        "ISO",
        2023,
        "Control charts - Part 2: Shewhart control charts",
        "ISO 7870-2:2023",
    ),
    Reference(
        "astm-e2587",
        "ASTM International",
        2016,
        "Standard practice for use of control charts in statistical process control",
        "ASTM E2587",
    ),
)

REFERENCES: Mapping[str, Reference] = MappingProxyType(
    {reference.key: reference for reference in sorted(_LISTED, key=lambda reference: reference.key)}
)
"""Every source by its key."""
