"""Compiled code gives the bits of the same code uncompiled, and is kept between starts."""

import os
import subprocess
import sys
from pathlib import Path

DIGEST = """
import hashlib
from charts.test_batches import DETECTORS, stream
from quietmill.charts.bank import Bank
from quietmill.charts.compiler import COMPILED

bank = Bank(DETECTORS)
digest = hashlib.sha256()
for seed in range(3):
    verdicts = bank.judge(stream(700, seed))
    for part in (*verdicts, bank.state, bank.pool):
        digest.update(part.tobytes())
print(COMPILED, digest.hexdigest())
"""


def run(script: str, **environment: str) -> str:
    paths = os.pathsep.join([str(Path(__file__).parents[1]), os.environ.get("PYTHONPATH", "")])
    done = subprocess.run(
        [sys.executable, "-c", script],
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "PYTHONPATH": paths, **environment},
    )
    return done.stdout.strip()


def test_compiled_and_uncompiled_code_agree_bit_for_bit() -> None:
    compiled, uncompiled = run(DIGEST), run(DIGEST, NUMBA_DISABLE_JIT="1")
    assert compiled.split()[0] == "True"
    assert uncompiled.split()[0] == "False"
    assert compiled.split()[1] == uncompiled.split()[1]


def test_the_cache_is_named_after_the_sources_and_used_where_it_can_be_written(tmp_path: Path) -> None:
    script = "from quietmill.charts.compiler import CACHE_FOLDER; print(CACHE_FOLDER)"
    folder = Path(run(script, CACHE_DIRECTORY=str(tmp_path)))
    assert folder.parent == tmp_path / "quietmill"
    assert folder.name.startswith("compiled-")
    assert folder.is_dir()


def test_where_nothing_can_be_written_it_compiles_without_a_cache(tmp_path: Path) -> None:
    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    script = "from quietmill.charts.compiler import CACHE_FOLDER; print(CACHE_FOLDER); import quietmill.charts.bank"
    assert run(script, CACHE_DIRECTORY=str(blocked)) == "None"
