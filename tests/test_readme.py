"""The README's blocks for researchers, run as they stand on the compiled sample."""

import re
import shlex
import shutil
from pathlib import Path

import polars as pl
import pytest

from tillwright.cli import commands
from tillwright.stages.compiling import Compiled

README = Path(__file__).resolve().parents[1] / "README.md"
PREFIX = "python3 -m uv run tillwright "


def section() -> str:
    text = README.read_text(encoding="utf-8")
    return text[text.index("### For researchers") : text.index("## What it does not do")]


@pytest.fixture(scope="module")
def folder(sample: Compiled, sample_folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The sample beside its workspace, as the first command of the README leaves it."""
    made = tmp_path_factory.mktemp("readme")
    shutil.copytree(sample_folder, made / "sample_parquet", ignore=shutil.ignore_patterns("work"))
    shutil.copytree(sample.context.workspace.root, made / "sample_parquet" / "work")
    return made


def test_every_block_for_researchers_runs_in_order(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(folder)
    known: dict[str, object] = {}
    ran = {"python": 0, "sh": 0}
    for language, block in re.findall(r"```(python|sh)\n(.*?)```", section(), re.DOTALL):
        if language == "python":
            exec(compile(block, "README.md", "exec"), known)
        else:
            for line in block.strip().splitlines():
                assert line.startswith(PREFIX)
                assert commands.main(shlex.split(line.removeprefix(PREFIX)), standalone_mode=False) == 0
        ran[language] += 1
    assert ran == {"python": 3, "sh": 5}
    # Outlets of one chain: their levels lie within some per cent of each other, and no line error shows.
    levels = pl.read_csv("sample_parquet/work/levels.csv")["level"]
    assert levels.null_count() == 0
    assert levels.is_between(90, 110).all()
    hedonic = pl.read_csv("sample_parquet/work/hedonic.csv")
    assert hedonic["index"].null_count() == 0
    parts = pl.read_csv("sample_parquet/work/contributions.csv")
    assert set(parts["status"]) >= {"continuing", "splice"}
