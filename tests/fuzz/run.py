"""A long run of hostile inputs: ``python -m tests.fuzz.run --count 100000``.

Every target runs in a process of its own, one after the other or, with ``--processes 2``, two at a time. Where atheris
is installed (``pip install ".[fuzz]"``) it chooses by coverage which inputs are changed further, with the mutators of
``mutate`` and its own; elsewhere a seeded random choice does. What raises, takes more than a second of processor time
or lets the process grow past its limit is put into the folder ``--out`` and tried again alone, in a fresh process
without instruments: only what it does there counts. The exit status is 1 if anything is left then.

``python -m tests.fuzz.run --replay 'file text' FILE...`` tries files again.
"""

from __future__ import annotations

import argparse
import contextlib
import hashlib
import heapq
import json
import os
import resource
import shutil
import signal
import subprocess
import sys
import tempfile
import time
import traceback
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from random import Random
from typing import Any

LIMIT = 1.0  # s of processor time for one input
MOST = 500.0  # MB of a process
GIVEN_UP = 10.0  # s of processor time after which an input is interrupted in the long run
SLOWEST = 5  # inputs of a target that are timed again alone
KEPT = 20  # faults of a target that are kept
NAMES = (  # as in targets.TARGETS, with their shares; named here because the instruments come before that import
    *("file text", "file bytes", "shelf file", "trials file", "cell", "quantity", "path", "saving"),
    *("command line", "views"),
    *("keys", "everything"),
)


class HangError(BaseException):
    """An input took too long; not an Exception, so that nobody between it and us takes it for his own."""


def _memory() -> float:
    """MB this process has held at most so far."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3


class Lap:
    """One target in this process: runs inputs, notes what they do, writes it down now and then."""

    def __init__(self, name: str, out: Path, limit: float) -> None:
        from tests.fuzz.targets import TARGETS, folder

        folder()
        self.name, self.out = name, out
        self.target = TARGETS[name]
        self.limit = limit
        self.stem = name.replace(" ", "-")
        self.runs = 0
        self.base = _memory()
        self.grown = 0.0
        self.kept: dict[str, str] = {}  # what happened -> file
        self.slow: list[tuple[float, str]] = []  # the slowest: time, file
        self.written = 0.0
        signal.signal(signal.SIGPROF, self.interrupt)

    def interrupt(self, *_: Any) -> None:
        raise HangError(f"interrupted after {self.limit:.0f} s of processor time")

    def once(self, data: bytes) -> None:
        """Run one input; whatever comes of it is noted, and never raised."""
        start = time.process_time()
        signal.setitimer(signal.ITIMER_PROF, self.limit)
        try:
            self.target.run(data)
        except (Exception, HangError, SystemExit) as error:
            signal.setitimer(signal.ITIMER_PROF, 0)
            self.keep(_where(error), data, traceback.format_exc())
        finally:
            signal.setitimer(signal.ITIMER_PROF, 0)
        self.timed(time.process_time() - start, data)
        grown = _memory()
        if grown > max(MOST, self.grown) and grown > self.base + 50:
            self.keep(f"the process held {grown:.0f} MB", data, "", sort="memory")
        self.grown = max(self.grown, grown)
        self.runs += 1
        if time.monotonic() > self.written + 1.0:
            self.write()

    def timed(self, seconds: float, data: bytes) -> None:
        if len(self.slow) < SLOWEST or seconds > self.slow[0][0]:
            name = self.store("slow", data)
            if all(name != other for _, other in self.slow):
                heapq.heappush(self.slow, (seconds, name))
            if len(self.slow) > SLOWEST:
                Path(heapq.heappop(self.slow)[1]).unlink(missing_ok=True)

    def keep(self, what: str, data: bytes, story: str, sort: str = "fault") -> None:
        if what in self.kept or len(self.kept) >= KEPT:
            return
        name = self.store(sort, data)
        self.kept[what] = name
        if story:
            Path(name + ".txt").write_text(f"{what}\n\n{story}", encoding="utf-8", errors="backslashreplace")

    def store(self, sort: str, data: bytes) -> str:
        name = self.out / f"{self.stem}-{sort}-{hashlib.sha256(data).hexdigest()[:12]}"
        name.write_bytes(data)
        return str(name)

    def write(self) -> None:
        self.written = time.monotonic()
        told = {
            "target": self.name,
            "runs": self.runs,
            "memory": self.grown,
            "slow": sorted(self.slow, reverse=True),
            "kept": self.kept,
        }
        place = self.out / f"{self.stem}.json"
        place.with_suffix(".new").write_text(json.dumps(told))
        place.with_suffix(".new").replace(place)


def _where(error: BaseException) -> str:
    """What happened and where in the program, so that one fault is kept once."""
    frames = traceback.extract_tb(error.__traceback__)
    own = [f for f in frames if f"{os.sep}budget{os.sep}" in f.filename] or frames[-1:]
    last = own[-1]
    words = str(error) if isinstance(error, HangError) else ""
    return f"{type(error).__name__} in {Path(last.filename).name}, {last.name} {words}".strip()


# -- the two ways to choose inputs


def by_chance(lap: Lap, count: int, seconds: float, seed: int) -> None:
    """Inputs made from the seeds, and from those that were made before."""
    rng = Random(f"{seed} {lap.name}")
    pool = list(lap.target.seeds)
    end = time.monotonic() + seconds
    while lap.runs < count and time.monotonic() < end:
        data = rng.choice(pool)
        for _ in range(rng.choice((1, 1, 1, 2, 3))):
            data = lap.target.mutate(rng, data)
        lap.once(data)
        if len(data) < 20_000 and rng.random() < 0.05:  # some of what was made is made worse later on
            if len(pool) < 200:
                pool.append(data)
            else:
                pool[rng.randrange(len(lap.target.seeds), 200)] = data


def by_coverage(name: str, count: int, seconds: float, seed: int, out: Path) -> None:
    """Inputs chosen by what they reach; does not come back, the fuzzer ends the process."""
    import atheris

    with atheris.instrument_imports(include=["budget", "tomllib"]):
        lap = Lap(name, out, GIVEN_UP)
    rng = Random(f"{seed} {name}")

    def once(data: bytes) -> None:
        lap.once(data)
        if lap.runs >= count:
            lap.write()
            os._exit(0)

    def mutate(data: bytes, most: int, number: int) -> bytes:
        rng.seed(number)
        if rng.random() < (0.9 if len(data) > 50_000 else 0.15):
            data = rng.choice(lap.target.seeds)
        made = bytes(atheris.Mutate(data, most)) if rng.random() < 0.25 else lap.target.mutate(rng, data)
        return made[:most]

    corpus = tempfile.mkdtemp(prefix="corpus-", dir=out)
    for number, data in enumerate(lap.target.seeds):
        (Path(corpus) / f"seed-{number}").write_bytes(data)
    options = (
        *(f"-seed={seed + 1}", f"-max_total_time={int(min(seconds, 10**6))}", "-max_len=1500000", "-len_control=0"),
        *("-rss_limit_mb=0", "-timeout=600", "-handle_alrm=0", "-print_final_stats=0", "-verbosity=0", "-reload=0"),
        *(f"-artifact_prefix={out}/", "-detect_leaks=0", corpus),
    )
    atheris.Setup([sys.argv[0], *options], once, custom_mutator=mutate)
    atheris.Fuzz()


def _child(options: argparse.Namespace) -> int:
    """One target in this process."""
    out = Path(options.out)
    resource.setrlimit(resource.RLIMIT_AS, (6 << 30, 6 << 30))
    tempfile.tempdir = tempfile.mkdtemp(prefix="tmp-", dir=out)
    os.environ["XDG_STATE_HOME"] = tempfile.tempdir
    if options.engine == "atheris":
        by_coverage(options.child, options.count, options.seconds, options.seed, out)
    lap = Lap(options.child, out, GIVEN_UP)
    by_chance(lap, options.count, options.seconds, options.seed)
    lap.write()
    return 0


def _replay(options: argparse.Namespace) -> int:
    """Files tried again alone in this process: what they take and what comes of them, one JSON line each."""
    with tempfile.TemporaryDirectory() as scratch:
        tempfile.tempdir = scratch
        lap = Lap(options.replay, Path(scratch), 60.0)
        for name in options.files:
            data = Path(name).read_bytes()
            before = set(lap.kept)
            start = time.process_time()
            lap.once(data)
            told = {
                "file": name,
                "seconds": round(time.process_time() - start, 3),
                "memory": round(_memory()),
                "faults": sorted(set(lap.kept) - before),
            }
            print(json.dumps(told), flush=True)
    return 0


# -- the run


def _again(target: str, names: list[str], limit: float) -> list[dict[str, Any]]:
    """What inputs do in a fresh process without instruments: one for all, and one for each that is not fine there."""
    together = _replayed(target, names) if names else []
    fine = {
        told["file"]: told
        for told in together
        if not told["faults"] and told["seconds"] <= limit and told["memory"] <= MOST
    }
    return [fine[name] if name in fine else _alone(target, name) for name in names]


def _alone(target: str, name: str) -> dict[str, Any]:
    """What one input does in a process of its own."""
    try:
        (found,) = _replayed(target, [name])
        return found
    except (subprocess.TimeoutExpired, ValueError) as error:
        return {"file": name, "seconds": 0.0, "memory": 0, "faults": [f"died: {error}"]}


def _replayed(target: str, names: list[str]) -> list[dict[str, Any]]:
    command = [sys.executable, "-m", "tests.fuzz.run", "--replay", target, *names]
    with contextlib.suppress(subprocess.TimeoutExpired):
        done = subprocess.run(command, capture_output=True, text=True, timeout=300, check=False)
        return [json.loads(line) for line in done.stdout.splitlines()]
    return []


def _lap(target: str, count: int, options: argparse.Namespace) -> dict[str, Any]:
    """One target from start to end: its own process, then what it kept, alone."""
    out = Path(options.out)
    command = [sys.executable, "-m", "tests.fuzz.run", "--child", target, "--engine", options.engine]
    command += [
        "--count",
        str(count),
        "--seconds",
        str(options.seconds),
        "--seed",
        str(options.seed),
        "--out",
        str(out),
    ]
    start = time.monotonic()
    stem = target.replace(" ", "-")
    with open(out / f"{stem}.log", "wb") as log:
        status = subprocess.run(command, stdout=log, stderr=log, check=False).returncode
    found = json.loads((out / f"{stem}.json").read_text()) if (out / f"{stem}.json").exists() else {}
    told: dict[str, Any] = {"target": target, "runs": 0, "memory": 0.0, "slow": [], "kept": {}, **found}
    told["took"] = time.monotonic() - start
    told["status"] = status
    told["faults"], told["slowest"], told["largest"] = [], 0.0, 0.0
    # These three do many things one after the other, and look at the clock themselves.
    limit = 60.0 if target in ("views", "keys", "everything") else LIMIT
    names = list(dict.fromkeys([*told["kept"].values(), *(name for _, name in told["slow"])]))
    for name, again in zip(names, _again(target, names, limit), strict=True):
        told["slowest"] = max(told["slowest"], again["seconds"])
        told["largest"] = max(told["largest"], again["memory"])
        faults = list(again["faults"])
        faults += [f"took {again['seconds']} s"] if again["seconds"] > limit else []
        faults += [f"held {again['memory']} MB"] if again["memory"] > MOST else []
        if faults:
            told["faults"].append((name, faults))
        elif "-slow-" in Path(name).name:
            Path(name).unlink(missing_ok=True)
    if status or (told["runs"] < count and told["took"] < options.seconds):
        told["faults"].append((str(out / f"{stem}.log"), [f"ended early with status {status} after {told['runs']}"]))
    return told


def main() -> int:
    """Run the targets, print a line for each, and what is left in the end."""
    parser = argparse.ArgumentParser(prog="python -m tests.fuzz.run", description=__doc__.split("\n")[0])
    parser.add_argument("--count", type=int, default=10_000, help="inputs in all (default: 10000)")
    parser.add_argument("--seconds", type=float, default=1e6, help="seconds for each target at most")
    parser.add_argument("--seed", type=int, default=1, help="another number, other inputs (default: 1)")
    parser.add_argument("--target", action="append", choices=NAMES, help="only this one, all inputs for it")
    parser.add_argument("--engine", choices=("auto", "atheris", "random"), default="auto", help="how inputs are chosen")
    parser.add_argument("--processes", type=int, default=1, help="targets at a time (default: 1)")
    parser.add_argument("--out", default="", help="folder for inputs that offend (default: a new one)")
    parser.add_argument("--child", help=argparse.SUPPRESS)
    parser.add_argument("--replay", choices=NAMES, metavar="TARGET", help="try FILEs again with a target")
    parser.add_argument("files", metavar="FILE", nargs="*", help="files to try again")
    options = parser.parse_args()
    os.environ["OPENBLAS_NUM_THREADS"] = "1"
    if options.replay:
        return _replay(options)
    if options.engine == "auto":
        from importlib.util import find_spec

        options.engine = "atheris" if find_spec("atheris") else "random"
    if options.child:
        return _child(options)
    return _all(options)


def _all(options: argparse.Namespace) -> int:
    from tests.fuzz.targets import TARGETS

    options.out = os.path.abspath(options.out or tempfile.mkdtemp(prefix="budget-fuzz-out-"))
    os.makedirs(options.out, exist_ok=True)
    names = options.target or [name for name in NAMES if TARGETS[name].weight]
    whole = sum(TARGETS[name].weight for name in names) or len(names)
    counts = {name: max(1, options.count * (TARGETS[name].weight or 1) // whole) for name in names}
    print(f"{sum(counts.values())} inputs chosen by {options.engine}, seed {options.seed}; what offends: {options.out}")
    print(f"{'target':14}{'inputs':>8}{'took':>8}{'slowest':>9}{'memory':>8}  faults", flush=True)
    left = []
    with ThreadPoolExecutor(max(1, options.processes)) as pool:
        for told in pool.map(lambda name: _lap(name, counts[name], options), names):
            print(
                f"{told['target']:14}{told['runs']:8}{told['took']:7.0f}s{told['slowest']:8.2f}s"
                f"{max(told['largest'], 0):6.0f}MB  {len(told['faults']) or 'none'}",
                flush=True,
            )
            left += [(told["target"], *fault) for fault in told["faults"]]
    for litter in (*Path(options.out).glob("tmp-*"), *Path(options.out).glob("corpus-*")):
        shutil.rmtree(litter, ignore_errors=True)
    for target, name, faults in left:
        print(f"{target}: {'; '.join(faults)}: {name}")
    return 1 if left else 0


if __name__ == "__main__":
    sys.exit(main())
