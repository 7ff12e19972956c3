"""What the environment says, for whichever subcommand: the settings, and whether remote callers are allowed."""

from __future__ import annotations

from collections.abc import Mapping

from ..api.settings import BadSettings, Settings

ALLOW_REMOTE = "ASSIGNABLE_ALLOW_REMOTE"


def read_settings(environment: Mapping[str, str]) -> tuple[Settings, bool]:
    """The settings, and whether ``ASSIGNABLE_ALLOW_REMOTE`` is ``yes``; raises :class:`BadSettings`."""
    allowed = environment.get(ALLOW_REMOTE, "no")
    if allowed not in ("yes", "no"):
        raise BadSettings(f"{ALLOW_REMOTE}: yes or no is expected.")
    settings = Settings.from_environment(
        {name: value for name, value in environment.items() if name != ALLOW_REMOTE}
    )
    return settings, allowed == "yes"
