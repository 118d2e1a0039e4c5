"""What Prefect costs over running the same steps directly: the sample's second compile, which does nothing else.

Run: python -m tests.bench.orchestration
"""

from __future__ import annotations

import functools
import subprocess
import sys
import tempfile
from pathlib import Path

from tests.bench.measure import interleave, show
from tests.prefect_server import clean_environment, running_server

ROUNDS = 5
SAMPLE = Path(__file__).parents[2] / "sample_parquet" / "plan.toml"
TILLWRIGHT = Path(sys.executable).with_name("tillwright")


def main() -> None:
    """Print the seconds over --direct, embedded and on a running server, once Prefect's folder is warm."""
    with tempfile.TemporaryDirectory() as folder, running_server(Path(folder) / "server") as url:
        work = Path(folder) / "work"
        compile_sample(work)
        seconds = interleave(
            {
                "direct": functools.partial(compile_sample, work, "--direct"),
                "embedded": functools.partial(compile_sample, work),
                "server": functools.partial(compile_sample, work, url=url),
            },
            ROUNDS,
        )
    rows = [(f"{name} less direct", f"{seconds[name] - seconds['direct']:.1f} s") for name in ("embedded", "server")]
    show("Orchestration: the sample, all steps unchanged", [*rows, ("direct", f"{seconds['direct']:.1f} s")])


def compile_sample(work: Path, *options: str, url: str | None = None) -> None:
    """Run the command; it must succeed."""
    environment = clean_environment(**({} if url is None else {"PREFECT_API_URL": url}))
    command = [str(TILLWRIGHT), "compile", str(SAMPLE), "--work", str(work), *options]
    subprocess.run(command, env=environment, check=True, capture_output=True)


if __name__ == "__main__":
    main()
