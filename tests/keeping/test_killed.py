"""What was acknowledged survives a kill at any moment, and the registry stays sound."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

from registry.keeping.auditing import audit
from registry.keeping.naming import find_record
from registry.keeping.opening import open_registry

KILLS = 50
LATEST_S = 0.25
"""A child opens the registry and admits several batches in this time."""

# A warm program that starts a child for each line it reads; the child prints an id once the
# call that recorded it has returned.
PROGRAM = """
import os, sys
from pathlib import Path
from registry.keeping.admitting import admit
from registry.keeping.opening import open_registry
import registry.keeping.writing, registry.reading.text

def work(place, folder, turn):
    with open_registry(place) as registry:
        for batch in range(1000):
            files = []
            for number in range(4):
                files.append(Path(folder) / f"{turn}-{batch}-{number}.txt")
                files[-1].write_text(f"P1 [V]\\tI [A]\\n0\\t{turn}e-9\\n{batch}\\t{number}e-9\\n")
            done = admit(registry, files, tuning="latest")
            os.write(1, "".join(f"id {one.kept.hex}\\n" for one in done.measurements).encode())

for line in sys.stdin:
    place, folder, turn = line.rstrip("\\n").split("\\t")
    child = os.fork()
    if child == 0:
        work(place, folder, turn)
        os._exit(0)
    os.write(1, f"child {child}\\n".encode())
    os.waitpid(child, 0)
    os.write(1, b"over\\n")
"""


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork")
def test_killed_at_random_moments_nothing_acknowledged_is_lost(lab_here: Any, tmp_path: Path) -> None:
    lab_here.state(1)
    lab_here.registry.close()
    place, folder = tmp_path / "registry", tmp_path / "work"
    folder.mkdir()
    moments = random.Random(20260301)
    acknowledged: list[str] = []
    program = subprocess.Popen(
        [sys.executable, "-c", PROGRAM],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        bufsize=1,
        cwd=Path(__file__).parents[2],
    )
    assert program.stdin is not None
    assert program.stdout is not None
    for turn in range(KILLS):
        program.stdin.write(f"{place}\t{folder}\t{turn}\n")
        word = program.stdout.readline().split()
        while word[0] != "child":
            acknowledged.append(word[1])
            word = program.stdout.readline().split()
        time.sleep(moments.uniform(0.0, LATEST_S))
        os.kill(int(word[1]), signal.SIGKILL)
        while (line := program.stdout.readline()) != "over\n":
            acknowledged.append(line.split()[1])
    program.stdin.close()
    program.stdout.close()
    assert program.wait(timeout=30) == 0
    with open_registry(place) as registry:
        with registry.reading() as connection:
            for digest in acknowledged:
                assert find_record(connection, digest).kind == "measurement"
        assert audit(registry).findings == ()
        assert len(set(acknowledged)) == len(acknowledged) > KILLS
