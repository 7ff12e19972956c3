"""The pages of the example programs, followed to the letter from an empty folder."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from programs.playing import PATIENCE_SECONDS, PLAIN, PROGRAMS, ROOT, Server


@pytest.mark.parametrize("name", ["MES.md", "LIMS.md"])
def test_what_a_page_says_is_what_happens(server: Server, tmp_path: Path, name: str) -> None:
    text = (PROGRAMS / name).read_text(encoding="utf-8")
    said = ""
    for language, block in re.findall(r"^```(sh|text)\n(.*?)^```$", text, re.M | re.S):
        if language == "sh":
            script = re.sub(r"python3 \w+\.py", rf"\g<0> --address {server.address}", block)
            environment = {
                **PLAIN,
                "HOME": str(tmp_path),
                "PATH": f"{Path(sys.executable).parent}:{os.environ['PATH']}",
            }
            done = subprocess.run(
                ["bash", "-euo", "pipefail", "-c", script],
                cwd=ROOT,
                env=environment,
                capture_output=True,
                text=True,
                timeout=PATIENCE_SECONDS,
                check=False,
            )
            assert done.returncode == 0, done.stderr
            said = done.stdout
        else:
            pattern = re.escape(block).replace(r"\.\.\.", "[^\n]*")
            assert re.search(f"^{pattern}", said, re.M), said


@pytest.mark.parametrize("name", ["MES.md", "LIMS.md"])
def test_what_a_page_links_to_and_names_exists(name: str) -> None:
    text = (PROGRAMS / name).read_text(encoding="utf-8")
    for target in re.findall(r"\]\((?!https?:)([^)#]+)", text):
        assert (PROGRAMS / target).exists(), target
    sources = "\n".join(file.read_text(encoding="utf-8") for file in PROGRAMS.glob("*.py"))
    for option in set(re.findall(r"`(--[a-z-]+)", text)) - {"--help"}:
        assert f'"{option}"' in sources, option
    for file in re.findall(r"`(\w+\.(?:py|json|csv))`", text):
        assert list(PROGRAMS.rglob(file)), file
