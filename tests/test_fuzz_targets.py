"""The fuzzer's short form: its seeds are good files, and junk around them keeps the readers' contract.

``scripts/fuzz`` runs the same targets for hours, guided by coverage.
"""

from __future__ import annotations

import sys
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError, SpinfitError

SCRIPTS = Path(__file__).resolve().parents[1] / "scripts"


@pytest.fixture(scope="module", autouse=True)
def scripts_on_the_path():
    sys.path.insert(0, str(SCRIPTS))
    yield
    sys.path.remove(str(SCRIPTS))


def target(name):
    from fuzz_seeds import DICTIONARIES, seeds_of
    from fuzz_targets import READERS

    return READERS[name], seeds_of(name), DICTIONARIES.get(name, [])


NAMES = ("text", "jcamp", "toml", "ties", "ligands", "hdf5", "archive")
# Damaged metadata can hang the HDF5 library, which only the guarded reader survives: see test_files_guard.
SAFE = ("text", "jcamp", "toml", "ties", "ligands")


@pytest.mark.filterwarnings("ignore:.*fork.*:DeprecationWarning")  # Python 3.12 warns where a library has threads
@pytest.mark.parametrize("name", NAMES)
def test_seeds_are_good_files(name):
    """A seed that is refused at its first line would teach the fuzzer nothing."""
    reader, seeds, _ = target(name)
    assert len(seeds) > 0
    for seed in seeds:
        reader(seed)


def test_every_target_is_known():
    from fuzz_readers import LONGEST, TARGETS
    from fuzz_seeds import DICTIONARIES
    from fuzz_targets import READERS

    assert set(TARGETS) == set(READERS) == set(LONGEST) == set(NAMES)
    assert all(DICTIONARIES[name] for name in NAMES)  # libFuzzer ends at once when there is no word


@pytest.mark.parametrize("name", SAFE)
def test_junk_around_seeds(name):
    reader, seeds, words = target(name)

    @settings(derandomize=True, deadline=None, max_examples=60, suppress_health_check=[HealthCheck.too_slow])
    @given(st.data())
    def run(data):
        content = bytearray(data.draw(st.sampled_from(seeds))[:1500])
        for _ in range(data.draw(st.integers(1, 4))):
            at, end = (data.draw(st.integers(0, len(content))) for _ in range(2))
            word = st.sampled_from(words).map(lambda w: w.encode("utf-8").decode("unicode_escape").encode("latin-1"))
            content[at : min(end, at + 40)] = data.draw(word | st.binary(max_size=6))
        try:
            reader(bytes(content))
        except SpinfitError as error:
            assert isinstance(error, InputError)  # noqa: PT017
            assert str(error).isprintable()  # noqa: PT017

    run()


@pytest.mark.parametrize(("kind", "count"), [("trace", 80), ("archive", 12)])
def test_odd_files_of_the_hdf5_library_itself(kind, count):
    """Whole files, but with types, links, filters and attributes that nothing of ours writes."""
    from fuzz_guarded import answer_of, made
    from fuzz_seeds import seeds_of

    seeds = seeds_of("hdf5" if kind == "trace" else "archive")
    answers = set()
    for number in range(count):
        answer, fault = answer_of(kind, made("odd", "test", number, seeds))
        assert not fault
        answers.add(answer)
    assert len(answers) > 5  # readable ones and several refusals
