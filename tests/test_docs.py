"""The pages for users say what the code reads."""

import ast
import re
import tomllib
from pathlib import Path

import pytest

from elbowroom.job.antennafile import read_antenna

ROOT = Path(__file__).parents[1]
PAGE = (ROOT / "docs" / "files.md").read_text()


@pytest.mark.parametrize("module", ["jobfile", "antennafile"])
def test_page_of_files__has_the_tables_of_the_readers(module):
    text = ast.get_docstring(ast.parse((ROOT / "src" / "elbowroom" / "job" / f"{module}.py").read_text()))
    rows = [line for line in text.splitlines() if line.startswith("``")]
    assert len(rows) > 15
    assert [row for row in rows if row not in PAGE] == []


def test_page_of_files__its_examples_are_antennas(tmp_path):
    examples = re.findall(r"```toml\n(.*?)```", PAGE, flags=re.S)
    assert len(examples) == 2
    for number, example in enumerate(examples):
        tomllib.loads(example)
        path = tmp_path / f"{number}.toml"
        path.write_text(example)
        assert read_antenna(path).ports


def test_readme__its_python_runs(monkeypatch, tmp_path):
    monkeypatch.chdir(tmp_path)
    (snippet,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(), flags=re.S)
    # fewer antennas and directions, so that the test is quick
    snippet = snippet.replace("random_disc(16, 5.0", "random_disc(3, 5.0").replace(
        "hemisphere_grid(2.0)", "hemisphere_grid(30.0)"
    )
    names: dict = {}
    exec(snippet, names)
    assert names["beam"].shape == names["unloaded"].shape == (len(names["sky"]), 2)
