"""Measure the processor time of `fairbatten --help`, of the other helps and of the main job, each as a fresh process.

Run from the project folder: python -m tests.benchmarks.command_line [repeats]

Times are of the child process, user and system together, the median of the repeats; beside each stands its ratio to an
interpreter that starts and does nothing.
"""

import os
import resource
import statistics
import subprocess
import sys
import tempfile
from pathlib import Path

ROOT = Path(__file__).parent.parent.parent


def processor_time(words, folder):
    """Processor time of one process, seconds."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    subprocess.run([sys.executable, *words], cwd=folder, env=environment, check=True, stdout=subprocess.DEVNULL)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return after.ru_utime - before.ru_utime + after.ru_stime - before.ru_stime


def main():
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    bracket = str(ROOT / "samples" / "bracket.dxf")
    command = ["-m", "converter"]
    cases = {
        "interpreter alone": ["-c", "pass"],
        "fairbatten --help": [*command, "--help"],
        "fairbatten fair --help": [*command, "fair", "--help"],
        "fairbatten inspect, bracket": [*command, "inspect", bracket],
        "fairbatten fair, bracket": [*command, "fair", bracket, "-o", "out.dxf", "--force"],
        "fairbatten fair --as arcs, bracket": [*command, "fair", bracket, "-o", "out.dxf", "--force", "--as", "arcs"],
        "fairbatten fair --as lines, bracket": [*command, "fair", bracket, "-o", "out.dxf", "--force", "--as", "lines"],
    }
    alone = None
    with tempfile.TemporaryDirectory() as folder:
        for name, words in cases.items():
            taken = statistics.median(processor_time(words, folder) for _ in range(repeats))
            alone = alone or taken
            print(f"{name:36} {taken:6.3f} s  {taken / alone:6.1f} times an interpreter alone")


if __name__ == "__main__":
    main()
