"""The first session of README.md, pasted into a shell word for word, does what it says."""

from __future__ import annotations

import csv
import io
import json
import os
import re
import shutil
import signal
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from tests.processes import free_port
from tests.scenarios.running import REPOSITORY

README = (REPOSITORY / "README.md").read_text(encoding="utf-8")
MARK = "---- end of a command ----"

pytestmark = [
    pytest.mark.skipif(shutil.which("curl") is None, reason="needs curl, which the README uses"),
    pytest.mark.skipif(shutil.which("bash") is None, reason="needs bash"),
]


def blocks() -> list[str]:
    """Return the shell blocks of the first session."""
    (session,) = re.findall(r"^## A first session\n(.*?)^## ", README, re.MULTILINE | re.DOTALL)
    return re.findall(r"^```sh\n(.*?)^```$", session, re.MULTILINE | re.DOTALL)


@dataclass
class Session:
    """A service in a folder as the README has it, and a shell in that folder."""

    folder: Path
    port: int

    def paste(self, *texts: str) -> list[str]:
        """Run texts in one shell that stops at the first failure; return what each printed."""
        script = f"\nprintf '%s' '{MARK}'\n".join(texts)
        script = script.replace("127.0.0.1:8080", f"127.0.0.1:{self.port}")
        done = subprocess.run(
            ["bash", "-eu", "-o", "pipefail", "-c", script],
            cwd=self.folder,
            capture_output=True,
            text=True,
        )
        assert done.returncode == 0, done.stderr
        assert done.stderr == ""
        return done.stdout.split(MARK)


@pytest.fixture(scope="module")
def session(store_binary: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Session]:
    """Start the service as `deploy/up.sh` does, in an empty folder, without the demo."""
    folder = tmp_path_factory.mktemp("readme")
    (folder / ".tallyward").mkdir(mode=0o700)
    (folder / ".tallyward" / "server").write_text(f"{store_binary}\n")  # prefer this server
    port = free_port()
    with open(folder / "service.log", "ab") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "service.cli", "serve"],
            env={
                **os.environ,
                "PYTHONPATH": str(REPOSITORY),
                "TALLYWARD_BIND": f"127.0.0.1:{port}",
            },
            cwd=folder,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=log,
            text=True,
        )
    assert process.stdout is not None
    try:
        assert str(port) in process.stdout.readline(), (folder / "service.log").read_text()
        yield Session(folder, port)
    finally:
        process.send_signal(signal.SIGTERM)
        assert process.wait() == 0
        process.stdout.close()


@pytest.fixture(scope="module")
def printed(session: Session) -> list[list[str]]:
    """Everything pasted, the batch twice; what each command of each block printed."""
    setting, batch, reading, watching, measuring = blocks()
    commands = [
        [setting],
        [batch],
        [batch],
        reading.splitlines(),
        watching.splitlines(),
        [measuring],
    ]
    flat = iter(session.paste(*(one for block in commands for one in block)))
    return [[next(flat) for _ in block] for block in commands]


def document(text: str) -> Any:
    found = json.loads(text)
    assert "errors" not in found
    assert found.get("status") is None
    return found


def test_setting_up_prints_nothing(printed: list[list[str]]) -> None:
    assert printed[0] == [""]


def test_batch_is_counted_once(printed: list[list[str]]) -> None:
    first, again = document(printed[1][0]), document(printed[2][0])
    assert (first["accepted"], first["duplicates"]) == (5, 0)
    assert (again["accepted"], again["duplicates"]) == (0, 5)
    assert first["exactly_once"] is again["exactly_once"] is True
    assert first["durability"] == "everysec"  # "The embedded store works this way."
    counts = {(e["merchant"], e["flow"]): e["count"] for e in again["merchants"]}
    assert counts == {
        ("harbour-books", "sale"): 3,
        ("harbour-books", "refund"): 1,
        ("salt-pier-cafe", "sale"): 1,
    }


def test_merchant_is_read(printed: list[list[str]]) -> None:
    merchant, digits, table = printed[3]
    found = document(merchant)
    assert (found["merchant"], found["count"], found["category"]) == ("harbour-books", 3, "5942")
    assert found["score"] is None  # "until there are 200 amounts"
    assert found["standing"] == "learning"
    cells = document(digits)["cells"]
    assert {c["cell"]: c["count"] for c in cells if c["count"]} == {"1": 2, "8": 1}
    rows = list(csv.DictReader(io.StringIO(table)))
    assert [(row["cell"], int(row["count"])) for row in rows] == [
        (c["cell"], c["count"]) for c in cells
    ]


def test_who_stands_out_and_the_alarms(printed: list[list[str]]) -> None:
    merchants, alarms = map(document, printed[4])
    assert len(merchants["merchants"]) == 3
    evidence = [e["evidence"] for e in merchants["merchants"]]
    assert evidence == sorted(evidence, reverse=True)
    assert alarms["alarms"] == []
    assert "next" in alarms


def test_amounts_are_measured(printed: list[list[str]]) -> None:
    found = document(printed[5][0])
    assert (found["currency"], found["count"]) == ("EUR", 12)
    assert found["views"]["lead_digit"]["count"] == 12


def test_alarms_can_be_followed_from_the_first_page_on(session: Session) -> None:
    """The README: ask for `/v1/alarms?after=<next>&wait=30`."""
    assert "`/v1/alarms?after=<next>&wait=30`" in README
    setting = blocks()[0]
    ask = 'curl -s -H "$AUTH" "$URL/v1/alarms{}"'
    _, first = session.paste(setting, ask.format(""))
    after = document(first)["next"]
    _, second = session.paste(setting, ask.format(f"?after={after}&wait=1"))
    assert document(second) == {"alarms": [], "next": after}


def test_description_is_where_the_readme_says(session: Session) -> None:
    assert "`/v1/openapi.json`" in README
    _, found = session.paste(blocks()[0], 'curl -s "$URL/v1/openapi.json"')
    assert json.loads(found)["openapi"].startswith("3.1")
