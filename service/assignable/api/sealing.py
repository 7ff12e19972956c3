"""The keys that the settings give limits documents."""

from __future__ import annotations

from ..documents.seal import UNSEALED, BadKeys, Seals, seals_of
from .settings import PREFIX, BadSettings, Settings, contents_of


def seals_in(settings: Settings) -> Seals:
    """The seals of an installation; without keys there are none. Raises BadSettings."""
    if settings.sealing_keys:
        blob = contents_of("sealing_keys", settings.sealing_keys)
        try:
            return seals_of(blob, required=settings.require_seal)
        except BadKeys as error:
            raise BadSettings(f"{PREFIX}SEALING_KEYS: {settings.sealing_keys}: {error}") from None
    if settings.require_seal:
        raise BadSettings(f"{PREFIX}REQUIRE_SEAL: without {PREFIX}SEALING_KEYS no seal can be checked.")
    return UNSEALED
