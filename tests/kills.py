"""Writers of files killed at random instants: what they leave must be whole, or not there at all.

Run as a script to kill many: python -m tests.kills 200
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections import Counter
from pathlib import Path

import numpy as np

import pathplan
from pathplan.export import read_table, write_table
from pathplan.table import JointTable, tick_times

ROOT = Path(__file__).parent.parent
SUFFIXES = (".csv", ".jsonl", ".npz", ".parquet")
ROWS = 20_000
SLOWEST = [0.0]  # from Ctrl-C to the end, as a part of what the whole command takes
WRITER = """
import sys
import numpy as np
from pathplan.export import write_table
from pathplan.table import JointTable, tick_times
time = tick_times(np.arange({rows}), .001)
more = dict(joint_kinds=("revolute",) * 6, cycle=.001, meta={{"task": "t", "task_file": "t.toml"}})
print("ready", flush=True)
k = 0
while True:
    k += 1
    write_table(JointTable(time, np.full(({rows}, 6), float(k)), **more), sys.argv[1])
"""


def kill_writer(file: Path, rng: np.random.Generator) -> str:
    """Start a writer that replaces a file over and over, kill it at a random instant, judge what is there.

    Returns 'old', 'new', or either with 'and a part': the part is gone after the next write.
    """
    if not file.exists():
        still = np.zeros((ROWS, 6))
        more = {"joint_kinds": ("revolute",) * 6, "cycle": 0.001, "meta": {"task": "t", "task_file": "t.toml"}}
        write_table(JointTable(tick_times(np.arange(ROWS), 0.001), still, **more), file)
    with subprocess.Popen(
        [sys.executable, "-c", WRITER.format(rows=ROWS), str(file)], stdout=subprocess.PIPE, env=environment()
    ) as writer:
        assert writer.stdout is not None and writer.stdout.readline() == b"ready\n"
        time.sleep(rng.uniform(0.0, 0.6))
        writer.send_signal(signal.SIGKILL)
    parts = parts_of(file)
    table = read_table(file)
    assert len(table) == ROWS and np.ptp(table.position) == 0, "rows of two writes in one file"
    write_table(table, file)
    assert parts_of(file) == []
    which = "new" if table.position[0, 0] else "old"
    return f"{which}, and a part" if parts else which


def parts_of(file: Path) -> list[str]:
    """What writers of this file left half-written beside it."""
    return [path.name for path in file.parent.iterdir() if path.match(f".{file.name}.*.part")]


def stop_plan(folder: Path, rng: np.random.Generator, how: signal.Signals = signal.SIGKILL) -> str:
    """Stop `pathplan plan` over a finished plan at a random instant; what is there afterwards is one plan or the other.

    Returns 'untouched', 'new', or 'done before' where the plan was quicker. Ctrl-C (SIGINT) ends it without a word.
    """
    task = folder / "task.toml"
    line = '[[step]]\nmotion = "joint"\nto = "parked"\n'
    arm = (ROOT / "robots" / "loader4.toml").as_posix()
    task.write_text(f'title = "kill"\narm = "{arm}"\ncycle = "1 ms"\nstart = "home"\n{line}')
    command = [sys.executable, "-m", "pathplan", "plan", "task.toml", "-o", "task.csv", "--quiet"]
    wanted = {}
    for pace in ("50 %", "100 %"):
        subprocess.run([*command, "--pace", pace], cwd=folder, env=environment(), check=True)
        wanted[pace] = (folder / "task.csv").read_bytes()
    started = time.monotonic()
    subprocess.run([*command, "--pace", "50 %"], cwd=folder, env=environment(), check=True)
    needed = time.monotonic() - started
    begin = 0.1 if how == signal.SIGINT else 0.5
    again = [*command, "--pace", "100 %"]
    options = {"cwd": folder, "env": environment(), "stderr": subprocess.PIPE, "text": True}
    # what runs in the background of a shell is started deaf to Ctrl-C
    with subprocess.Popen(again, **options, preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL)) as planner:
        time.sleep(rng.uniform(begin, 1.1) * needed)
        done = planner.poll() is not None
        planner.send_signal(how)
        stopped = time.monotonic()
        assert planner.stderr is not None
        told = planner.stderr.read()
    if how == signal.SIGINT:
        SLOWEST[0] = max(SLOWEST[0], (time.monotonic() - stopped) / needed)
        # a shell shows 130 too for an interpreter that was stopped before it could take Ctrl-C
        assert planner.returncode in (0, 130, -signal.SIGINT) and told == "", f"status {planner.returncode}: {told}"
        assert not list(folder.glob(".*.part"))
    found = (folder / "task.csv").read_bytes()
    assert found in wanted.values(), "neither the old table nor the new one"
    pathplan.read_table(folder / "task.csv")
    if done:
        return "done before"
    return "untouched" if found == wanted["50 %"] else "new"


def environment() -> dict[str, str]:
    return {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}


def main(count: int, seed: int = 0) -> None:
    """Stop `count` writers over the kinds of file, of ten one whole command by a kill and one by Ctrl-C."""
    from tempfile import TemporaryDirectory

    rng = np.random.default_rng(seed)
    seen: Counter[str] = Counter()
    with TemporaryDirectory() as folder:
        for k in range(count):
            suffix = SUFFIXES[k % len(SUFFIXES)]
            if k % 5 == 4:
                (Path(folder) / "plan").mkdir(exist_ok=True)
                how = signal.SIGKILL if k % 10 == 9 else signal.SIGINT
                seen[f"plan, {how.name}: {stop_plan(Path(folder) / 'plan', rng, how)}"] += 1
            else:
                seen[f"{suffix}: {kill_writer(Path(folder) / f't{suffix}', rng)}"] += 1
            if (k + 1) % 20 == 0:
                slowest = f"Ctrl-C takes at most {SLOWEST[0]:.2f} of the command's time"
                print(k + 1, dict(sorted(seen.items())), slowest, flush=True)


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else 0)
