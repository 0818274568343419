"""Feed junk to every reader, guided by coverage, and keep whatever breaks their contract.

The contract: a reader returns a valid object or raises one of `spinfit.errors`, on one line; never another exception,
never a hang, within bounded memory.  Atheris (libFuzzer) makes the input.  Each target runs in a process of its own.
HDF5 is tried in a forked process first, and only what does not crash or hang the HDF5 library there is read again
where coverage is seen; should it do so all the same, the process is started again, and the input counts as a finding
unless the guarded reader (`spinfit.files.guard`) refuses it.

    python scripts/fuzz_readers.py text jcamp --seconds 600
"""

from __future__ import annotations

import argparse
import json
import re
import subprocess
import sys
import time
import traceback
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
TARGETS = ("text", "jcamp", "toml", "ties", "ligands", "hdf5", "archive")
LONGEST = {"text": 3000, "jcamp": 3000, "toml": 3000, "ties": 300, "ligands": 2000, "hdf5": 16000, "archive": 64000}
IN_LIBRARY = ("hdf5", "archive")
"""Targets whose inputs reach a C library."""
SLOW = 2.0
"""Seconds of processor time beyond which an input counts as a finding."""

# ---------------------------------------------------------------- inside the fuzzer


def fault_of(error: BaseException) -> str:
    """Name a breach by the kind of exception and the last line of the project that it passed."""
    frames = [f for f in traceback.extract_tb(error.__traceback__) if "spinfit" in f.filename]
    where = f"{Path(frames[-1].filename).name}:{frames[-1].lineno}" if frames else "?"
    return f"{type(error).__name__} at {where}"


def inside(name: str, folder: Path, flags: list[str]) -> None:
    """Fuzz one target in this process until libFuzzer ends it."""
    import atheris

    with atheris.instrument_imports(include=["spinfit"]):
        from fuzz_targets import READERS

        from spinfit.errors import SpinfitError
    reader = READERS[name]
    seen: set[str] = set()

    def keep(fault: str, data: bytes) -> None:
        if fault not in seen:
            seen.add(fault)
            file = folder / f"{re.sub(r'[^A-Za-z0-9]+', '_', fault)}.bin"
            if not file.exists():
                file.write_bytes(data)
                print(f"FINDING {fault}: {file}", file=sys.stderr, flush=True)

    def one(data: bytes) -> None:
        begun = time.process_time()
        try:
            reader(data)
        except SpinfitError as error:
            if "\n" in str(error) or not str(error).strip():
                keep("a message that is not one line", data)
        except Exception as error:
            keep(fault_of(error), data)
        if time.process_time() - begun > SLOW:
            keep("slow", data)

    atheris.Setup([sys.argv[0], *flags], one)
    atheris.Fuzz()


# ---------------------------------------------------------------- the driver

_STATUS = re.compile(r"#(\d+)\s+(\w+)\s+cov: (\d+) ft: (\d+)")


def fuzz(name: str, folder: Path, seconds: float, runs: int) -> dict[str, object]:
    """Run one target until its time or its number of inputs is over; return what happened."""
    from fuzz_seeds import DICTIONARIES, seeds_of  # not in the fuzzer, where nothing may be imported before it

    corpus, findings = folder / "corpus" / name, folder / "findings" / name
    for place in (corpus, findings):
        place.mkdir(parents=True, exist_ok=True)
    for number, seed in enumerate(seeds_of(name)):
        (corpus / f"seed_{number:02d}").write_bytes(seed[: LONGEST[name]])
    words = folder / f"{name}.dict"
    words.write_text("".join(f'"{word}"\n' for word in DICTIONARIES.get(name, ())), encoding="utf-8")
    until = time.monotonic() + seconds
    done, last_new, restarts, coverage = 0, 0, 0, 0
    while done < runs and (left := until - time.monotonic()) > 1:
        flags = [
            f"-max_total_time={int(left)}", f"-runs={runs - done}", f"-max_len={LONGEST[name]}", f"-dict={words}",
            "-timeout=30", "-rss_limit_mb=3000", f"-artifact_prefix={findings}/",
            f"-seed={1 + restarts}", "-reload=0", "-len_control=0", str(corpus),
        ]  # fmt: skip
        command = [sys.executable, "-W", "ignore", __file__, "--inside", name, "--folder", str(findings), *flags]
        here = 0
        with subprocess.Popen(command, cwd=ROOT, stderr=subprocess.PIPE, text=True, errors="replace") as process:
            assert process.stderr is not None
            for line in process.stderr:
                if match := _STATUS.match(line):
                    here = int(match[1])
                    if match[2] == "pulse":
                        print(f"{name}: {done + here} inputs, {match[3]} edges", flush=True)
                    if int(match[3]) > coverage and match[2] in ("NEW", "REDUCE", "INITED"):
                        coverage, last_new = int(match[3]), done + here
                elif line.startswith(("FINDING", "Traceback", "ERROR", "==")) or "Error" in line:
                    print(line.rstrip(), flush=True)
        done += here
        restarts += 1
        if here == 0 and process.returncode:
            sys.exit(f"{name}: ended with {process.returncode} before it began")
    return {
        "target": name, "inputs": done, "seconds": round(seconds - (until - time.monotonic())), "edges": coverage,
        "edges last grew at input": last_new, "processes": restarts, "findings": judged(name, findings),
    }  # fmt: skip


def judged(name: str, findings: Path) -> list[str]:
    """Return the findings that count; what ended the process counts unless the guarded reader refuses it."""
    counted = []
    for file in sorted(findings.iterdir()):
        if file.name.startswith(("crash-", "timeout-", "oom-", "leak-", "slow-unit-")) and name in IN_LIBRARY:
            check = f"from spinfit.{'files.reading' if name == 'hdf5' else 'report.archive_reading'} import *\n"
            check += f"from spinfit.errors import InputError\ntry: {'read' if name == 'hdf5' else 'read_archive'}"
            check += f"({str(file)!r})\nexcept InputError as e: print(e)\n"
            done = subprocess.run([sys.executable, "-c", check], capture_output=True, text=True, timeout=600, cwd=ROOT)
            if done.returncode == 0:
                continue
        counted.append(str(file))
    return counted


def main() -> None:
    """Read the command line."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("targets", nargs="*", metavar="TARGET", help=" ".join(TARGETS))
    parser.add_argument("--seconds", type=float, default=600, help="for each target (600)")
    parser.add_argument("--runs", type=int, default=10_000_000, help="inputs for each target at most")
    parser.add_argument("--folder", type=Path, default=ROOT / "build" / "fuzz", help="corpus and findings stay there")
    args = parser.parse_args()
    for name in args.targets:
        if name not in TARGETS:
            parser.error(f'there is no target "{name}"; known: {", ".join(TARGETS)}')
    results = []
    for name in args.targets or TARGETS:
        results.append(fuzz(name, args.folder.resolve(), args.seconds, args.runs))
        print(json.dumps(results[-1]), flush=True)
    sys.exit(1 if any(result["findings"] for result in results) else 0)


if __name__ == "__main__":
    if sys.argv[1:2] == ["--inside"]:
        inside(sys.argv[2], Path(sys.argv[4]), sys.argv[5:])
    else:
        main()
