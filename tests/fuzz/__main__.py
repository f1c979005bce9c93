"""Fuzzes the readers: ``python -m tests.fuzz [READER ...] [--cases N] [--seconds S] [--seed K] [--guided]``.

With ``--guided`` (needs the extra ``fuzz``) new cases grow from those that reached new code. Each reader runs in a
child that may grow by a gigabyte; what it dies of is found again from the case that it was reading.
"""

from __future__ import annotations

import argparse
import hashlib
import os
import shutil
import sys
import time
import traceback
from pathlib import Path

import numpy as np
from tests.fuzz.judge import Finding, Judge, bound_memory, in_memory
from tests.fuzz.mutate import mutate
from tests.fuzz.readers import READERS

SILENCE_S = 150.0


class Tally:
    """Counts the cases of one reader in a file that outlives its process, and keeps one case of each fault."""

    def __init__(self, reader: str, kept: Path) -> None:
        self.reader, self.kept = reader, kept
        self.seen: set[str] = set()
        self.cases = 0
        kept.mkdir(parents=True, exist_ok=True)
        self.current = current_case(reader)

    def before(self, data: bytes) -> None:
        """Note the case at hand, so that it is known should the process die of it."""
        self.cases += 1
        self.current.write_bytes(data)

    def note(self) -> None:
        """Write down how many there were."""
        (self.kept / f"{self.reader}.count").write_text(str(self.cases))

    def after(self, data: bytes, found: Finding | None) -> None:
        """Keep a fault that was not seen before."""
        if found is None or found.key in self.seen:
            return
        self.seen.add(found.key)
        keep(self.kept, self.reader, data, found)


def current_case(reader: str) -> Path:
    """Where the case at hand is noted."""
    return in_memory() / f"leadline-fuzz-{os.getuid()}-{reader}.current"


def keep(kept: Path, reader: str, data: bytes, found: Finding) -> None:
    """Keep a case and what was wrong with it."""
    name = f"{reader}-{hashlib.blake2b(found.key.encode(), digest_size=4).hexdigest()}"
    if (kept / name).exists() and (kept / name).stat().st_size <= len(data):
        return
    (kept / name).write_bytes(data)
    (kept / f"{name}.txt").write_text(f"{reader}: {found.key}\n{found.text}\n")
    print(f"  {reader}: {found.key} -> {kept / name}", flush=True)


def blind(reader: str, tally: Tally, cases: int, seconds: float, seed: int) -> None:
    """Cases by seed alone: the same seed gives the same cases."""
    judge = Judge(READERS[reader])
    bound_memory()
    start = time.monotonic()
    number = 0
    while number < cases and time.monotonic() - start < seconds:
        rng = np.random.default_rng([seed, number])
        data = mutate(judge.good[int(rng.integers(len(judge.good)))], judge.good, rng)
        tally.before(data)
        tally.after(data, judge.look(data))
        number += 1
        if number % 500 == 0:
            tally.note()
    judge.close()


def guided(reader: str, tally: Tally, cases: int, seconds: float, seed: int) -> None:
    """Cases that grow from those that reached new code, by libFuzzer under atheris."""
    import atheris

    with atheris.instrument_imports(include=["leadline", "nrrd", "nibabel", "tifffile", "tomllib", "zarr", "json"]):
        judge = Judge(READERS[reader])
    corpus = tally.kept / f"corpus-{reader}"
    corpus.mkdir(exist_ok=True)
    for k, good in enumerate(judge.good):
        (corpus / f"good-{k}").write_bytes(good)
    bound_memory()

    def one(data: bytes) -> None:
        tally.before(data)
        tally.after(data, judge.look(data))
        if tally.cases % 100 == 0:
            tally.note()

    def spoil(data: bytes, largest: int, number: int) -> bytes:
        rng = np.random.default_rng(number)
        if rng.random() < 0.3:
            return bytes(atheris.Mutate(data, largest))
        return mutate(data, judge.good, rng)[:largest]

    longest = max(4096, 4 * max(map(len, judge.good)))
    atheris.Setup(
        [sys.argv[0], f"-runs={cases}", f"-max_total_time={int(seconds)}", f"-seed={seed}", f"-max_len={longest}",
         "-rss_limit_mb=0", "-timeout=60", "-print_final_stats=0", "-verbosity=0", f"-artifact_prefix={tally.kept}/",
         str(corpus)],
        one, custom_mutator=spoil,
    )  # fmt: skip
    atheris.Fuzz()


def watched(reader: str, said: argparse.Namespace) -> int:
    """Fuzz one reader in a child; again from the next seed where it died of a case. Returns how many were read."""
    done, seed = 0, said.seed
    start = time.monotonic()
    while done < said.cases and time.monotonic() - start < said.seconds:
        count = said.kept / f"{reader}.count"
        count.unlink(missing_ok=True)
        left = said.cases - done, said.seconds - (time.monotonic() - start)
        pid = os.fork()
        if pid == 0:
            os.dup2(os.open(os.devnull, os.O_WRONLY), 2)  # libraries in C speak there
            tally = Tally(reader, said.kept)
            code = 1
            try:
                (guided if said.guided else blind)(reader, tally, *left, seed)
                code = 0
            except BaseException:  # noqa: BLE001 - a child must never return into its parent's loop
                traceback.print_exc(file=sys.stdout)
            finally:
                tally.note()
                sys.stdout.flush()
                os._exit(code)
        status = wait(pid, current_case(reader))
        for left in in_memory().glob(f"leadline-fuzz-{pid}-*"):
            shutil.rmtree(left)
        read = int(count.read_text()) if count.is_file() else 0
        done += read
        if status:
            keep(
                said.kept,
                reader,
                current_case(reader).read_bytes(),
                Finding(f"died of {status}", "ended by the system"),
            )
            seed += 1000
            done += 1
        elif not said.guided or not read:
            break
    current_case(reader).unlink(missing_ok=True)
    return done


def wait(pid: int, current: Path) -> str:
    """Wait for a child; kill it where it reads one case for too long. Returns what it died of, or ''."""
    while True:
        ended, status = os.waitpid(pid, os.WNOHANG)
        if ended:
            code = os.waitstatus_to_exitcode(status)
            return "" if code >= 0 else f"signal {-code}"
        time.sleep(0.5)
        if current.is_file() and time.time() - current.stat().st_mtime > SILENCE_S:
            os.kill(pid, 9)
            os.waitpid(pid, 0)
            return "a hang"


def main() -> int:
    """Fuzz the readers asked for; 1 where a fault was found."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("readers", nargs="*", default=list(READERS))
    parser.add_argument("--cases", type=int, default=2000, help="at most, for each reader")
    parser.add_argument("--seconds", type=float, default=60.0, help="at most, for each reader")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--guided", action="store_true")
    parser.add_argument("--kept", type=Path, default=Path("fuzz-found"), help="where faults are kept")
    said = parser.parse_args()
    said.kept = said.kept.absolute()
    total = 0
    for reader in said.readers:
        start = time.process_time(), time.monotonic()
        cases = watched(reader, said)
        total += cases
        print(f"{reader:<16} {cases:>9} cases {time.monotonic() - start[1]:8.0f} s", flush=True)
    faults = sorted(p.name for p in said.kept.glob("*.txt"))
    print(f"{total} cases, {len(faults)} faults kept in {said.kept}")
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
