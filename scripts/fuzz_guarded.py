"""Feed damaged and odd HDF5 files to the readers, by the hundred thousand.

The fuzzer of ``scripts/fuzz`` sees coverage but pays a forked process for each input.  Here one forked process reads
thousands of files with the function that answers in the guarded child (`spinfit.files.hdf5_child.answer_to`), under
limits on time and memory as there; when a file ends it, the next process goes on after that file, which the guarded
reader must then refuse.  Two kinds of files are made: "damaged" ones, by changes in good ones, and "odd" ones, which
the HDF5 library itself wrote, but with types, shapes, links, filters and attributes that no trace or archive has.
A damaged file whose answer is of a new kind becomes one of those that are changed further.

The contract: a trace (an archive) or an `InputError` on one line, whatever the bytes.  What breaks it is kept.

    scripts/fuzz guarded trace archive --count 100000
"""

from __future__ import annotations

import argparse
import io
import json
import os
import random
import re
import signal
import sys
import time
import traceback
from collections import Counter
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from fuzz_seeds import DICTIONARIES, seeds_of

from spinfit.errors import InputError
from spinfit.files import guard
from spinfit.files import hdf5 as h5_reading
from spinfit.files.assembling import assemble
from spinfit.files.hdf5 import read_hdf5
from spinfit.files.hdf5_child import answer_to, set_limits
from spinfit.files.tree import sealed, tree_from
from spinfit.report.archive_reading import archive_from

ROOT = Path(__file__).resolve().parents[1]
LONGEST = 64000
KINDS = ("trace", "archive")
_WORDS = [w.encode().decode("unicode_escape").encode("latin-1") for w in DICTIONARIES["hdf5"]]
HANGS = 0.3
"""Seconds of processor time after which reading a small file does not end."""
_LIMITS = (2**15, 2**31 - 1, 2**32 - 1, 2**63, 2**64 - 1)
CHECKED = 5
"""Files that ended a process, of each way to end, that the guarded reader must refuse."""
MOST_KNOWN = 400
"""Files that are changed further."""


def answer_here(what: str, *, file: str, content: bytes) -> tuple[dict[str, Any], Any]:
    """Answer as `guard.ask` does, in this process."""
    return answer_to({"what": what, "file": file, "path": "", "under": []}, content)


def read_as(kind: str, data: bytes) -> Any:
    """Read a file as the commands do; archives get a fresh digest, as somebody who means harm would give them."""
    if kind == "trace":
        return assemble(read_hdf5(data, "f.h5"), field_unit="mT")
    return archive_from(sealed(tree_from(*guard.ask("tree", file="f.h5", content=data))), "f.h5")


def answer_of(kind: str, data: bytes) -> tuple[str, str]:
    """Return what kind of answer a file gets, and what broke the contract or ""."""
    try:
        got = read_as(kind, data)
    except InputError as error:
        text = str(error)
        if "\n" in text or not text.isprintable():
            return "broken", "a message that is not one printable line"
        # messages of the library, in brackets, differ with every address
        return re.sub(r"[\d.]+", "#", f"{error.found.partition('(')[0]}; {error.right}")[:90], ""
    except Exception as error:
        frame = [f for f in traceback.extract_tb(error.__traceback__) if "spinfit" in f.filename][-1]
        return "broken", f"{type(error).__name__} at {Path(frame.filename).name}:{frame.lineno}"
    if kind == "trace":
        return f"a trace with {len(got.notes)} notes", ""
    return f"an archive with {len(got.files)} files", ""


# ---------------------------------------------------------------- damaged files


def damaged(rng: random.Random, pool: list[bytes]) -> bytes:
    """Return a good file with one to eight changes."""
    content = bytearray(rng.choice(pool))
    for _ in range(1 + int(rng.expovariate(0.6))):
        size = len(content)
        if size < 16:
            break
        at = rng.randrange(size)
        what = rng.randrange(9)
        if what == 0:
            content[at] ^= 1 << rng.randrange(8)
        elif what == 1:
            content[at] = rng.choice((0, 1, 2, 8, 16, 0x7F, 0x80, 0xFE, 0xFF, rng.randrange(256)))
        elif what in (2, 3):
            length = rng.choice((2, 4, 8))
            number = rng.choice(
                (0, 1, size, size - 1, rng.randrange(size), 2**15, 2**31 - 1, 2**32 - 1, 2**63, 2**64 - 1)
            )
            content[at : at + length] = (number % 256**length).to_bytes(length, "little")[: size - at]
        elif what == 4:
            source, length = rng.randrange(size), rng.randrange(1, 64)
            content[at : at + length] = content[source : source + length]
        elif what == 5:
            content[at : at + rng.choice((0, 4))] = rng.choice(_WORDS)
        elif what == 6 and rng.random() < 0.3:
            del content[at:]
        elif what == 7 and rng.random() < 0.5:
            del content[at : at + rng.choice((1, 2, 8))]
        else:
            other = rng.choice(pool)
            length = rng.randrange(8, 512)
            content[at : at + length] = other[at : at + length]
    return bytes(content[:LONGEST])


# ---------------------------------------------------------------- odd files

_NAMES = (
    "entry",
    "data",
    "field",
    "signal",
    "y",
    "x",
    "sub",
    "title",
    "frequency",
    "temperature",
    "a/b",
    "..",
    "é",
    " ",
)
_ATTRIBUTES = (
    "NX_class", "default", "signal", "axes", "units", "long_name", "auxiliary_signals", "field_indices", "version",
    "interpretation", "uncertainties", "x_indices", "file_format", "spinfit_digest",
)  # fmt: skip
_TEXTS = (
    "NXentry", "NXdata", "NXroot", "data", "field", "signal", "y", ".", "/", "mT", "GHz", "K", "", "a:b", "[x,y]", "\n",
    "\x00", "\u202e", "9.4 GHz", "nan", "1e999", "mT/V", "e" * 3000, "é", "entry/data",
)  # fmt: skip


def _values(rng: random.Random) -> Any:
    """Return something that h5py can store."""
    shape = rng.choice(((), (1,), (0,), (2,), (24,), (24,), (24,), (24, 1), (1, 24), (2, 3, 4), (300,)))
    what = rng.randrange(14)
    size = int(np.prod(shape))
    ramp = np.linspace(
        rng.choice((330.0, -1.0, 1e300, -1e300)), rng.choice((340.0, 330.0, 1e-300, np.nan, np.inf)), size
    )
    if what < 5:
        return ramp.reshape(shape).astype(rng.choice((">f8", "<f4", "<f2", "<f8", "<f8")))
    if what == 5:
        return np.arange(size).reshape(shape).astype(rng.choice(("i1", ">i4", "u8", "?", "c16", "longdouble")))
    if what == 6:
        return np.zeros(shape, [("r", "f8"), ("t", "S3"), ("n", "i2", (2,))])
    if what == 7:
        return np.array([rng.choice(_TEXTS[:14]).encode() for _ in range(size)], dtype="S9").reshape(shape)
    if what in (8, 9):
        text = np.array([rng.choice(_TEXTS).replace("\x00", "") for _ in range(size)], dtype=object).reshape(shape)
        return text.astype(h5py.string_dtype(rng.choice(("utf-8", "ascii"))))
    if what == 10:
        return np.zeros(shape, dtype=h5py.enum_dtype({"RED": 0, "GREEN": 1}, basetype="i"))
    if what == 11:
        return np.zeros(shape, dtype="V7")
    if what == 12:
        return h5py.Empty(rng.choice(("f8", "S3")))
    return rng.choice((*_TEXTS, 9.4, -0.0, float("nan"), 10**18, True, np.float32(3), b"\xff\xfe"))


def _attributes(rng: random.Random, node: Any) -> None:
    for _ in range(rng.choice((0, 1, 2, 4))):
        value = rng.choice(_TEXTS) if rng.random() < 0.6 else _values(rng)
        node.attrs[rng.choice(_ATTRIBUTES)] = value


def _one_more(rng: random.Random, root: h5py.File) -> None:
    """Add, change or remove something."""
    groups: list[h5py.Group] = [root]
    sets: list[h5py.Dataset] = []
    root.visititems(lambda _, node: (groups if isinstance(node, h5py.Group) else sets).append(node))
    group, name, what = rng.choice(groups), rng.choice(_NAMES), rng.randrange(13)
    if what < 3:
        _attributes(rng, rng.choice([*groups, *sets]))
    elif what < 6 and sets:
        old = rng.choice(sets)
        place, kept = old.name, dict(old.attrs)
        del root[place]
        root.create_dataset(place, data=_values(rng)).attrs.update(kept)
    elif what == 6:
        options = rng.choice(({}, {"compression": "gzip"}, {"compression": "lzf"}, {"fletcher32": True}))
        _attributes(rng, group.create_dataset(name, data=_values(rng), chunks=True, **options))
    elif what == 7:
        shape = rng.choice(((10**6,), (10**9, 10**9), (2**40,), (0, 10**9), (5, 0)))
        group.create_dataset(
            name, shape=shape, dtype=rng.choice(("f8", "i1")), chunks=True, fillvalue=rng.choice((0, 3))
        )
    elif what == 8:
        target = rng.choice(("/", "/entry/data", "nowhere", "../x", "/entry/link", name, "/entry/data/field"))
        group[name] = rng.choice((h5py.SoftLink(target), h5py.ExternalLink("other.h5", target)))
    elif what == 9 and sets:
        group[name] = rng.choice([*sets, *groups])
    elif what == 10:
        kind = rng.choice((h5py.vlen_dtype("f8"), h5py.ref_dtype, h5py.regionref_dtype, h5py.vlen_dtype("i1")))
        group.create_dataset(name, shape=rng.choice(((2,), (24,))), dtype=kind)
        group[name + "t"] = np.dtype("f4")
    elif what == 11:
        layout = h5py.VirtualLayout(shape=(4, 24), dtype="f8")
        layout[0] = h5py.VirtualSource(rng.choice((".", "other.h5")), "/entry/data/signal", shape=(24,))
        group.create_virtual_dataset(name, layout, fillvalue=0)
    elif len(groups) > 1:
        del root[rng.choice([*sets, *groups[1:]]).name]


def odd(rng: random.Random, pool: list[bytes]) -> bytes:
    """Return a good file after one to six changes by the HDF5 library itself."""
    buffer = io.BytesIO(rng.choice(pool))
    # numbers may overflow on their way into smaller types
    with np.errstate(all="ignore"), h5py.File(buffer, "r+") as root:
        for _ in range(rng.randrange(1, 7)):
            try:
                _one_more(rng, root)
            except (ValueError, TypeError, OSError, KeyError, RuntimeError, OverflowError):
                continue  # such a thing cannot be made
    return buffer.getvalue()


# ---------------------------------------------------------------- the driver


def made(how: str, seed: str, number: int, pool: list[bytes]) -> bytes:
    """Return the file of a number."""
    rng = random.Random(f"{seed} {number}")
    return (damaged if how == "damaged" else odd)(rng, pool)


def work(kind: str, how: str, seed: str, numbers: range, pool: list[bytes], out: int) -> None:
    """Read the files of some numbers in this process; say how each went on a line of its own."""
    for number in (signal.SIGPROF, signal.SIGXCPU):
        signal.signal(number, signal.SIG_DFL)
    set_limits(3600.0, 2**30)
    h5_reading.ask = guard.ask = answer_here
    for number in numbers:
        data = made(how, seed, number, pool)
        os.write(out, b"?\n")  # from here on it is the reader that may end this process
        signal.setitimer(signal.ITIMER_PROF, HANGS)
        answer, fault = answer_of(kind, data)
        signal.setitimer(signal.ITIMER_PROF, 0)
        os.write(out, json.dumps([number, answer, fault]).encode() + b"\n")


def refused(kind: str, data: bytes) -> str:
    """Read with the guard a file that ended a process; return what is wrong with that or ""."""
    answer, fault = answer_of(kind, data)
    return fault or ("" if "damaged" in answer or "memory" in answer else f"ended a process, not the child: {answer}")


def run(kind: str, count: int, seed: int, folder: Path, how: str) -> list[str]:
    """Read `count` files; return what broke."""
    pool = seeds_of("hdf5" if kind == "trace" else "archive")
    key, answers, broken, done, ended = f"{seed} {kind} {how}", Counter[str](), list[str](), 0, Counter[str]()
    begun, shown = time.monotonic(), 0

    def keep(fault: str, number: int, known: list[bytes]) -> None:
        if fault and fault not in broken:
            broken.append(fault)
            file = folder / f"{kind}_{how}_{re.sub(r'[^A-Za-z0-9]+', '_', fault)[:80]}.bin"
            file.write_bytes(made(how, key, number, known))
            print(f"FINDING {fault}: {file}", flush=True)

    while done < count:
        known, numbers = list(pool), range(done, min(done + 2000, count))
        reading, writing = os.pipe()
        forked = os.fork()
        if forked == 0:
            os.close(reading)
            try:
                work(kind, how, key, numbers, known, writing)
            finally:
                os._exit(0)
        os.close(writing)
        asked = False
        with open(reading, encoding="utf-8") as lines:
            for line in lines:
                asked = line == "?\n"
                if asked:
                    continue
                number, answer, fault = json.loads(line)
                done = number + 1
                answers[answer] += 1
                keep(fault, number, known)
                # odd files go on from the seeds alone, which the library in this process surely survives
                if answers[answer] in (1, 10, 100, 1000) and how == "damaged" and len(pool) < MOST_KNOWN:
                    pool.append(made(how, key, number, known))
                if answers[answer] == 1:
                    print(f"  {number}: {answer}", flush=True)
        status = os.waitpid(forked, 0)[1]
        if done < numbers.stop:
            name = signal.Signals(status & 127).name if status & 127 else f"exit {status >> 8}"
            if asked:
                ended[name] += 1
                if ended[name] <= CHECKED:
                    keep(refused(kind, made(how, key, done, known)), done, known)
            else:
                print(f"number {done}: making it ended the process ({name})", flush=True)
            done += 1
        if done - shown >= 10_000 or done >= count:
            shown = done
            rate = done / (time.monotonic() - begun)
            text = f"{done} files, {len(answers)} kinds of answers, processes ended: {dict(ended)}, {rate:.0f}/s"
            print(f"{kind} {how}: {text}", flush=True)
    for answer, often in answers.most_common():
        print(f"  {often:7d}  {answer}")
    return broken


def main() -> None:
    """Read the command line."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("kinds", nargs="*", metavar="KIND", help="trace archive; both by default")
    parser.add_argument("--how", choices=("odd", "damaged"), action="append", help="both by default")
    parser.add_argument("--count", type=int, default=10_000, help="files of each sort (10 000)")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--folder", type=Path, default=ROOT / "build" / "fuzz", help="findings stay there")
    given = parser.parse_args()
    if wrong := set(given.kinds) - set(KINDS):
        parser.error(f'there is no kind "{wrong.pop()}"; known: {", ".join(KINDS)}')
    given.folder.mkdir(parents=True, exist_ok=True)
    broken = []
    for kind in given.kinds or KINDS:
        for how in given.how or ("odd", "damaged"):
            broken += run(kind, given.count, given.seed, given.folder, how)
    sys.exit(1 if broken else 0)


if __name__ == "__main__":
    main()
