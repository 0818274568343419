"""Bad input of the spin Hamiltonian's keys, through the command line: one line says what, where and what is right."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from spinfit.cli import main

SWEEP = '[sweep]\nfrequency = "9.5 GHz"\nfield = "200, 400 mT"\npoints = 101\n'
WIDTH = '[species.width]\ngaussian = "1 mT"\n'
PAIR = '[[species.spin]]\nS = "1/2"\ng = 2.0\n[[species.spin]]\nS = "1"\ng = 2.0\n'


def model(inside: str, spin: str = 'S = "1/2"\ng = 2.0\n') -> str:
    return f'{SWEEP}[[species]]\nname = "x"\n{spin}{inside}{WIDTH}'


def nucleus(inside: str, spin: str = 'S = "1/2"\ng = 2.0\n') -> str:
    return model(f"[[species.nucleus]]\n{inside}\n", spin)


def stevens(key: str, S: str) -> str:
    return model(f'[species.stevens]\n"{key}" = "1 MHz"\n', f'S = "{S}"\ng = 2.0\n')


def exchange(inside: str) -> str:
    return model(f"[[species.exchange]]\n{inside}\n", PAIR)


NITROGENS = "".join(
    f'[[species.nucleus]]\nisotope = "14N"\nA = "{60 + k}, {60 + k}, {70 + k} MHz"\ntreat = "exact"\n' for k in range(9)
)
AN = 'A = "10 MHz"'
WRONG = [
    # isotopes
    (nucleus(f'isotope = "64Cu"\n{AN}'), 'nucleus.1.isotope: "64Cu" is not a known isotope; known of Cu: 63Cu, 65Cu'),
    (nucleus(f'isotope = "63Cv"\n{AN}'), 'nucleus.1.isotope: "63Cv" is not a known isotope; did you mean "63Cu"?'),
    (nucleus(f'isotope = "Cu63"\n{AN}'), 'nucleus.1.isotope: "Cu63" is not a known isotope; did you mean "63Cu"?'),
    (nucleus(f'isotope = "63cu"\n{AN}'), 'did you mean "63Cu"?'),
    (nucleus(f'element = "Kv"\n{AN}'), 'nucleus.1.element: "Kv" is not a known element; did you mean "K'),
    (nucleus(f'isotope = "12C"\n{AN}'), "nucleus.1.isotope: 12C has no nuclear spin; take this nucleus out"),
    (nucleus(f'isotope = "16O"\n{AN}'), "nucleus.1.isotope: 16O has no nuclear spin"),
    (nucleus(f'element = "Ar"\n{AN}'), "nucleus.1.element: no natural isotope of Ar has a nuclear spin"),
    (nucleus(f'isotope = "1H"\n{AN}\nP = "1, 1, -2 MHz"'), "nucleus.1.P: 1H has no quadrupole moment (I < 1)"),
    (nucleus(f'isotope = "63Cu"\n{AN}\nP = "1, 2, 3 MHz"'), "nucleus.1.P: the trace is 6, not 0"),
    (nucleus(f'isotope = "63Cu"\n{AN}\ntreat = "exactly"'), 'nucleus.1.treat: "exactly" is not known; did you mean'),
    # Stevens operators
    (stevens("B4_5", "5/2"), "stevens: there is no operator B4_5; k is 2, 4 or 6 and q from -k (m) to k"),
    (stevens("B4_m5", "5/2"), "stevens: there is no operator B4_m5"),
    (stevens("B3_0", "5/2"), "stevens: there is no operator B3_0"),
    (stevens("B4_-3", "5/2"), 'stevens: "B4_-3" is no operator; did you mean "B4_m3"?'),
    (stevens("B4_0", "3/2"), "stevens: B4_0 has no effect on S = 1.5; k goes up to 2S = 3: take it out"),
    (stevens("B6_3", "5/2"), "stevens: B6_3 has no effect on S = 2.5; k goes up to 2S = 5"),
    # couplings to what is not there
    (nucleus(f'isotope = "63Cu"\n{AN}\ncouples_to = 2'), "nucleus.1.couples_to: there is no spin 2; there is one spin"),
    (nucleus(f'isotope = "63Cu"\n{AN}\ncouples_to = 3', PAIR), "nucleus.1.couples_to: there is no spin 3; "),
    (nucleus(f'isotope = "63Cu"\n{AN}\ncouples_to = 0', PAIR), "nucleus.1.couples_to: 0; write a whole number from 1"),
    (
        exchange('between = [1, 3]\nJ = "3 MHz"'),
        "exchange.1.between: there is no spin 3; spins are counted from 1 to 2",
    ),
    (exchange('between = [2, 2]\nJ = "3 MHz"'), "exchange.1.between: spin 2 with itself; name two different spins"),
    (exchange('between = [1, 2]\ndipolar = "1, 2, 3 MHz"'), "exchange.1.dipolar: the trace is 6, not 0"),
    (model('[[species.exchange]]\nbetween = [1, 2]\nJ = "3 MHz"\n'), "exchange.1: there is only one spin to couple"),
    # too large
    (
        model(NITROGENS),
        "species.1: its spin space has 39366 dimensions, one matrix of which takes 24.8 GB; up to 4096 is ",
    ),
    (
        model(NITROGENS),
        'drop the weakest coupled nuclei, nucleus 1 (14N) first, or write treat = "second order" for them',
    ),
    (
        nucleus('isotope = "14N"\ncount = 12\nA = "50 MHz"\nP = "1, 1, -2 MHz"\ntreat = "exact"'),
        "its spin space has 1062882 dimensions",
    ),
    (
        model("", '[[species.spin]]\nS = "7/2"\ng = 2.0\n' * 6),
        "has 262144 dimensions, one matrix of which takes 1.1e+03 GB",
    ),
    (model("", '[[species.spin]]\nS = "7/2"\ng = 2.0\n' * 6), "use fewer or smaller spins"),
    # populations
    (model("", 'S = "1"\ng = 2.0\npopulations = [1, 2]\n'), "populations: has 2 numbers; write 3"),
    (model("", f"populations = [1, 2, 3]\n{PAIR}"), "populations: has 3 numbers; write 6, one for each sublevel"),
    (model("", 'S = "1"\ng = 2.0\npopulations = [1, -2, 3]\n'), "populations: has a negative number"),
    (model("", 'S = "1"\ng = 2.0\npopulation = [1, 2, 3]\n'), 'unknown key "population"; did you mean "populations"?'),
]


@pytest.mark.parametrize("command", ["simulate", "lines", "diagram"])
@pytest.mark.parametrize(("text", "says"), WRONG, ids=[says[:45] for _, says in WRONG])
def test_what_is_wrong_is_said_in_one_line(
    text: str, says: str, command: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "m.toml"
    path.write_text(text, encoding="utf-8")
    assert main([command, str(path)]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert err.startswith(f"spinfit: {path}: species.1")
    assert says in err


def test_many_strong_nuclei_left_to_us_are_refused_with_what_to_drop(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("spinfit.hamiltonian._memory", lambda: 8e9)
    path = tmp_path / "m.toml"
    path.write_text(model(NITROGENS.replace('treat = "exact"\n', "")), encoding="utf-8")
    assert main(["simulate", str(path)]) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert "39366 states" in err
    assert "where 8 GB are there" in err
    assert "(nucleus 1, 14N, first)" in err


def test_equivalent_nuclei_are_counted_by_their_total_spin(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    # 14 exact protons are 2^15 product states but at most 2 x 15 at a time: the total spin is conserved
    path = tmp_path / "m.toml"
    text = nucleus('isotope = "1H"\ncount = 14\nA = "12 MHz"\ntreat = "exact"')
    path.write_text(text.replace('"200, 400 mT"', '"335, 344 mT"'), encoding="utf-8")
    assert main(["simulate", str(path), "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert len(found["report"][0]["x"]["systems"]) == 8
