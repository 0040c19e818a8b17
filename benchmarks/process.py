"""What a process costs: its start, compiling the kernels, a payoff never seen before, and memory.

    python benchmarks/process.py             # all
    python benchmarks/process.py --quick     # without memory, which takes 10^8 paths

Every number is of fresh processes that run `mcx price`, as after an installation: kernels and bytecode are kept compiled
in a folder of this benchmark's own. Where two are compared they run in turns.
"""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

DEMO = Path(__file__).parent.parent / "payoffs" / "examples" / "harbour_lantern.yaml"
SMALL = Path(__file__).parent.parent / "payoffs" / "examples" / "european.yaml"
ROUNDS = 15
PRICE = [sys.executable, "-m", "mcx", "price"]
IMPORTS = [sys.executable, "-c", "import numpy, numba"]

# Prices the files given and says how often numba compiled something.
COUNTED = """
import sys
from numba.core import event
from mcx import api
with event.install_recorder("numba:compile") as compiled:
    print(api.price(*sys.argv[1:]).price)
print(sum(each.is_start for _, each in compiled.buffer))
"""

NEW_PAYOFF = """
payoff: made_for_this_benchmark
about: The higher of two averages where some date saw a high level, else a share of the lowest level.
terms:
  initial: {type: level}
  dates:   {type: dates}
  share:   {type: percent}
running:
  plain:  {average: spot / initial, at: dates}
  square: {average: (spot / initial) ** 2, at: dates}
  high:   {highest: spot / initial, at: dates}
  low:    {lowest: spot / initial, at: dates}
events:
  - at: dates.last
    pay: max(plain, sqrt(square)) if high > 1.05 else (share * low)
    as: redemption
---
contract: A payoff that nobody has priced before
currency: EUR
units: 1
assets: [harbour]
payoff: made_for_this_benchmark
terms:
  initial: 100
  dates: {count: 7, until: 2y}
  share: 90%
---
market: 0y
rates: {EUR: 2%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, yield: 0%, vol: 20%}
"""


class Bench:
    """Fresh processes with caches of their own."""

    def __init__(self, folder: str):
        self.folder = folder
        self.environment = {name: value for name, value in os.environ.items() if name != "PYTHONDONTWRITEBYTECODE"}
        self.environment |= {"PYTHONPYCACHEPREFIX": f"{folder}/bytecode", "NUMBA_CACHE_DIR": f"{folder}/kernels"}

    def seconds(self, command: list[str]) -> float:
        begun = time.perf_counter()
        subprocess.run(command, check=True, env=self.environment, stdout=subprocess.DEVNULL)
        return time.perf_counter() - begun

    def peak(self, command: list[str]) -> int:
        """The most memory that the process had at a time, in the unit of the platform."""
        process = subprocess.Popen(command, env=self.environment, stdout=subprocess.DEVNULL)
        _, status, usage = os.wait4(process.pid, 0)
        process.returncode = os.waitstatus_to_exitcode(status)
        if process.returncode:
            raise SystemExit(f"{command} ended with {process.returncode}")
        return usage.ru_maxrss

    def start(self) -> None:
        """A demo in a cold process, kernels compiled before, against the imports alone."""
        price, imports = [*PRICE, str(DEMO)], IMPORTS
        self.seconds(price), self.seconds(imports)
        pairs = [(self.seconds(price), self.seconds(imports)) for _ in range(ROUNDS)]
        ours, theirs = zip(*pairs, strict=True)
        for how, name in ((statistics.median, "median"), (min, "best")):
            print(f"mcx price {DEMO.name}: {how(ours):.2f} s, importing numpy and numba {how(theirs):.2f} s, "
                  f"ratio of the {name}s {how(ours) / how(theirs):.2f} (goal: at most 3)")  # fmt: skip

    def compiling(self) -> None:
        """The first run of a machine against the second."""
        command = [*PRICE, str(SMALL), "--paths", "64"]
        first, second = self.seconds(command), self.seconds(command)
        print(f"compiling the kernels once: {first - second:.1f} s of {first:.1f} s (goal: at most 30 s)")

    def new_payoff(self) -> None:
        """Whether a payoff that the kernels have never seen compiles anything."""
        file = Path(self.folder) / "new.yaml"
        file.write_text(NEW_PAYOFF)
        done = subprocess.run([sys.executable, "-c", COUNTED, str(file)], check=True, env=self.environment,
                              stdout=subprocess.PIPE, text=True)  # fmt: skip
        price, compiled = done.stdout.split()
        print(f"a payoff never seen before: {compiled} compilations (goal: 0), price {float(price):.4f}")

    def memory(self) -> None:
        """Peak memory of many paths against that of few."""
        few, many = (self.peak([*PRICE, str(SMALL), "--paths", str(paths)]) for paths in (10**5, 10**8))
        print(f"peak memory of 10^8 over 10^5 paths: {many / few:.3f} (goal: at most 1.1)")


def main() -> None:
    with tempfile.TemporaryDirectory() as folder:
        bench = Bench(folder)
        bench.compiling()
        bench.new_payoff()
        bench.start()
        if "--quick" not in sys.argv:
            bench.memory()


if __name__ == "__main__":
    main()
