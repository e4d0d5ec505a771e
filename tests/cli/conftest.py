"""Running commands as a user does, inside the test's own process."""

import contextlib
import signal
import sys
from dataclasses import dataclass

import pytest

from elbowroom.job.templates import write_template


@dataclass
class Outcome:
    """What a command left behind."""

    code: int
    out: str
    err: str

    @property
    def all(self):
        return self.out + self.err


@pytest.fixture(autouse=True, scope="session")
def _interruptible():
    """Let programs that tests start see Ctrl-C even where the tests run in the background, where a shell turns it off."""
    if signal.getsignal(signal.SIGINT) is signal.SIG_IGN:
        signal.signal(signal.SIGINT, signal.default_int_handler)


@pytest.fixture
def command(monkeypatch, capsys):
    """Run ``elbowroom ARGUMENTS`` and return its exit code and what it wrote."""
    from elbowroom.cli.main import main

    def run(*arguments):
        monkeypatch.setattr(sys, "argv", ["elbowroom", *map(str, arguments)])
        capsys.readouterr()
        code = 0
        try:
            main()
        except SystemExit as end:
            code = end.code or 0
        with contextlib.suppress(AttributeError):
            sys.stdout.flush()
        captured = capsys.readouterr()
        return Outcome(code, captured.out, captured.err)

    return run


@pytest.fixture
def job(tmp_path):
    """A small job of three antennas at one frequency with coarse maps, and how to change its files."""
    folder = tmp_path / "station"
    write_template("small", folder)
    path = folder / "job.toml"
    text = path.read_text()
    text = text.replace("frequency_hz = [110e6, 165e6]", "frequency_hz = [110e6]").replace("step_deg = 2.0", "step_deg = 10.0")
    assert "110e6]" in text
    assert "step_deg = 10.0" in text
    path.write_text(text)
    layout = folder / "layout.csv"
    lines = layout.read_text().splitlines(keepends=True)
    rows = [i for i, line in enumerate(lines) if line.strip() and not line.startswith("#")]
    layout.write_text("".join(line for i, line in enumerate(lines) if i not in rows[4:]))
    return path


@pytest.fixture
def change():
    """Replace text in a file, once and for certain."""

    def replace(path, old, new):
        text = path.read_text()
        assert text.count(old) >= 1, f"{old!r} is not in {path.name}"
        path.write_text(text.replace(old, new, 1))

    return replace
