"""``spinfit quench`` and the tables and pictures of ions."""

import json

import numpy as np
import pytest

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.ion.defaults import default_model
from spinfit.ion.lande import lookup
from spinfit.ion.model import solve
from spinfit.ion.quench import parse_measured, quench_row
from spinfit.ion.tensors import doublet_g, principal_axes
from spinfit.report.ion_plots import comparison_figure, doublets_figure, level_figure, stages, term_figure
from spinfit.report.ion_tables import levels_table, mixing_table, quench_table
from spinfit.units import MHZ_PER_WAVENUMBER as CM

FIELD = """
[[ion]]
name = "Cu2+"
source = "band maxima of this glass"
covalency = 0.8
measured = "2.05, 2.33(1)"
[ion.orbitals]
"x2-y2" = "15000 cm^-1"
z2 = "7000 cm^-1"
xy = "0 cm^-1"
xz = "-500 cm^-1"
yz = "-500 cm^-1"
"""


def run(capsys, *arguments):
    code = main(["quench", *arguments])
    out, err = capsys.readouterr()
    return code, out, err


def test_one_table_for_three_ions(capsys):
    code, out, err = run(capsys, "Cu2+", "Ni(II)", "Er3+")
    assert (code, err) == (0, "")
    first = out.splitlines()[0]
    for heading in ("g_J", "spin", "field", "1st order", "measured", "L left / %", "p(J)", "p(S)"):
        assert heading in first
    assert max(map(len, out.splitlines())) <= 120
    assert out.count("typical values from memory") == 3  # never used silently
    assert "4I15/2" in out


def test_json_is_json_alone(capsys):
    code, out, err = run(capsys, "Cu2+", "--measured", "2.05, 2.06, 2.33(1)", "--json")
    assert (code, err) == (0, "")
    (record,) = json.loads(out)
    assert record["g_measured"] == [2.05, 2.06, 2.33]
    # (2.33 - g_e)/4 (reference collection)
    assert record["orbital_fraction_measured"][2] == pytest.approx((2.33 - 2.0023193) / 4, abs=1e-6)
    kinds = {(n["quantity"], n["axis"]) for n in record["needed"]}
    assert {("reduction", "all"), ("splitting", "z")} <= kinds
    splitting = next(n for n in record["needed"] if (n["quantity"], n["axis"]) == ("splitting", "z"))
    assert splitting["unit"] == "cm^-1"
    assert splitting["uncertainty"] == pytest.approx(0.01 / 0.33 * splitting["value"], rel=0.1)


def test_field_file_and_outcome(capsys, tmp_path):
    field = tmp_path / "glass.toml"
    field.write_text(FIELD, encoding="utf-8")
    code, out, _ = run(capsys, "--field", str(field), "--json")
    (record,) = json.loads(out)
    assert code == 0
    assert record["crystal_field"] == "band maxima of this glass"
    assert record["g_measured"] == [2.05, 2.05, 2.33]
    outcome = tmp_path / "outcome.json"
    entry = {"value": 2.06, "uncertainty": 0.001}
    outcome.write_text(json.dumps({"parameters": {"cu.g_perp": entry, "cu.g_par": {"value": 2.3}}}), encoding="utf-8")
    code, out, _ = run(capsys, "Cu2+", "--field", str(field), "--outcome", str(outcome), "--json")
    assert json.loads(out)[0]["g_measured"] == [2.06, 2.06, 2.3]


def test_levels_and_moments_against_temperature(capsys):
    code, out, _ = run(capsys, "Ni2+", "--temperatures", "2, 300 K", "--json")
    (record,) = json.loads(out)
    # 3A2 below 3T2 at 10Dq (8500 cm^-1 in the typical field), split by spin-orbit coupling of some 550 cm^-1
    assert record["levels"][0] == {"energy_cm1": 0.0, "states": 3}
    assert record["levels"][1]["energy_cm1"] == pytest.approx(8500, rel=0.05)
    low, warm = (m["moment"] for m in record["moments"])
    # g sqrt(S(S+1)) of S = 1 in the cold; the temperature-independent part adds a little at 300 K
    assert low == pytest.approx(record["g_crystal_field"][0] * 2**0.5, rel=1e-3)
    assert low < warm == record["moment_crystal_field_300K"]
    code, out, _ = run(capsys, "Ni2+", "--temperatures", "2, 300 K")
    assert "p(Ni2+)" in out
    assert run(capsys, "Ni2+", "--temperatures", "0 K")[0] == 2
    assert run(capsys, "Ni2+", "--temperatures", "300")[0] == 2


def test_candidates_and_doublets(capsys):
    code, out, _ = run(capsys, "--measured", "2.05, 2.06, 2.33", "--candidates")
    assert code == 0
    assert "Cu2+, hole in x2-y2" in "\n".join(out.splitlines()[2:5])
    code, out, _ = run(capsys, "--doublets", "5/2", "--measured", "4.29", "--json")
    record = json.loads(out)
    np.testing.assert_allclose(record["doublets"][0][0], [6, 6, 2], atol=1e-9)
    assert record["matches"][0]["rhombicity"] == pytest.approx(1 / 3, abs=0.01)


def test_doublet_of_erbium(capsys):
    code, out, _ = run(capsys, "Er3+", "--doublet", "1", "--json")
    (record,) = json.loads(out)
    np.testing.assert_allclose(record["g"], 6.8, atol=0.05)  # cubic gamma 7, K. R. Lea et al. (1962)
    np.testing.assert_allclose(np.add(record["from_orbital"], record["from_spin"]), record["g"])


@pytest.mark.parametrize(
    ("arguments", "found"),
    [
        ([], "no ion is named"),
        (["Xx2+"], 'no element "Xx"'),
        (["Cu2+", "--measured", "abc"], '--measured: "abc" is not a g value'),
        (["Cu2+", "Ni2+", "--measured", "2"], "1 measured g for 2 ions"),
        (["Cu2+", "--field", "none.toml"], "none.toml: there is no such file"),
        (["Cu2+", "--outcome", "none.json"], "none.json: there is no such file"),
        (["Cu2+", "--species", "cu"], "--species: stands without --outcome"),
        (["--doublets", "2"], "not a spin with Kramers doublets"),
        (["--candidates"], "wants one measured g"),
        (["Ni2+", "--doublet", "1"], "even number of electrons"),
        (["Cr3+", "--doublet", "1"], "4-fold, not a doublet"),
        (["Cu2+", "--doublet", "9"], "no level 9"),
        (["Cu2+", "--plot", "x.gif"], "not a format"),
        (["Cu2+", "Ni2+", "--levels", "x.png"], "name one ion"),
        (["Zn2+", "--doublet", "1"], "only closed shells"),
        (["Cu2+", "--measred", "2"], 'did you mean "--measured"'),
    ],
)
def test_mistakes(capsys, tmp_path, monkeypatch, arguments, found):
    monkeypatch.chdir(tmp_path)
    code, out, err = run(capsys, *arguments)
    assert code == 2
    assert found in err
    assert err.count("\n") == 1
    assert "Traceback" not in err
    assert not list(tmp_path.iterdir())


def test_pictures_are_drawn(capsys, tmp_path):
    names = [tmp_path / "c.png", tmp_path / "l.svg", tmp_path / "d.pdf"]
    assert run(capsys, "Cu2+", "--plot", str(names[0]), "--levels", str(names[1]))[0] == 0
    assert run(capsys, "--doublets", "3/2", "--plot", str(names[2]))[0] == 0
    for name, magic in zip(names, (b"\x89PNG", b"<?xml", b"%PDF"), strict=True):
        assert name.read_bytes().startswith(magic)


def test_what_the_pictures_hold():
    row = quench_row("Cu2+", measured=parse_measured("2.05, 2.33"))
    axes = comparison_figure([row, quench_row("Eu3+")]).axes[0]
    assert [label.get_text() for label in axes.get_yticklabels()] == ["Cu2+  2D5/2", "Eu3+  7F0"]
    drawn = {line.get_marker(): sorted(line.get_xdata()) for line in axes.lines if line.get_ydata()[0] < 0.5}
    assert drawn["D"] == [2.05, 2.05, 2.33]
    assert len({line.get_color() for line in axes.lines}) == 4
    model = default_model("Cr3+")
    terms = dict(stages(model))["free ion:\nterms"]
    # 4P (12 states) lies 15 B above 4F (28) (E. U. Condon, G. H. Shortley), B = 680 cm^-1 in the typical field
    assert terms[0] == (pytest.approx(0), 28)
    assert (pytest.approx(15 * 680 * CM), 12) in terms
    figure = level_figure(model)
    assert len(figure.axes[1].lines) == 4  # S = 3/2
    assert len(doublets_figure(2.5).axes) == 3
    assert len(term_figure(0.5, 1, 1.5, 10 * CM).axes) == 2


def test_tables_of_levels():
    text = levels_table(lookup("Cu2+"))
    # 2D3/2 lies 5/2 |lambda| = 2072.5 cm^-1 above 2D5/2
    assert text.splitlines()[3].split() == ["2D3/2", "0.79954", "2072"]
    assert "8.000" in mixing_table(quench_row("Cr3+"))
    assert "no level mixes" in mixing_table(quench_row("Eu3+"))
    assert "closed shells" in quench_table([quench_row("Zn2+")])


def test_ion_lists_terms_and_levels(capsys, tmp_path):
    picture = tmp_path / "co.png"
    assert main(["ion", "Co2+", "--terms", "--levels", "--plot", str(picture), "--json"]) == 0
    (record,) = json.loads(capsys.readouterr().out)
    # d3 and d7 have 8 terms, 2D twice (E. U. Condon, G. H. Shortley (1935))
    assert {t["term"]: t["count"] for t in record["terms"]} == {
        "4F": 1, "4P": 1, "2H": 1, "2G": 1, "2F": 1, "2D": 2, "2P": 1
    }  # fmt: skip
    assert [level["J"] for level in record["levels"]] == ["9/2", "7/2", "5/2", "3/2"]
    # Landé: E(7/2) - E(9/2) = 9/2 |lambda|, |lambda| = 177 cm^-1
    assert record["levels"][1]["energy_cm1"] == pytest.approx(4.5 * 177)
    # Co2+ 4F7/2 at 841, 4F3/2 at 1867 cm^-1 (C. E. Moore, Atomic Energy Levels, from memory)
    found = {x["label"]: x["energy_cm1"] for x in record["intermediate"]}
    assert found["4F7/2"] == pytest.approx(841, rel=0.05)
    assert found["4F3/2"] == pytest.approx(1867, rel=0.05)
    assert record["weak_field_limit_mT"] > 1e5
    assert picture.read_bytes().startswith(b"\x89PNG")
    assert main(["ion", "Co2+", "4F9/2", "--levels"]) == 0
    text = capsys.readouterr().out
    assert "by Landé's interval rule" in text
    assert "from memory" in text
    assert main(["ion", "4F9/2", "--terms"]) == 2
    assert "without a configuration" in capsys.readouterr().err
    assert main(["ion", "3d7", "--plot", str(tmp_path / "x.png")]) == 2
    assert "no lambda of 3d7" in capsys.readouterr().err


def test_axes_of_coinciding_values_are_straight():
    values, axes = principal_axes(np.diag([2.0, 3.0, 2.0]))
    np.testing.assert_allclose(axes, np.eye(3))
    np.testing.assert_allclose(values, [2, 3, 2])
    turn = np.array([[0.6, -0.8, 0], [0.8, 0.6, 0], [0, 0, 1]])
    values, axes = principal_axes(turn @ np.diag([1.0, 2.0, 3.0]) @ turn.T)
    np.testing.assert_allclose((axes * values) @ axes.T, turn @ np.diag([1.0, 2.0, 3.0]) @ turn.T, atol=1e-12)
    assert np.linalg.det(axes) == pytest.approx(1)


def test_levels_beyond_what_was_computed():
    levels = solve(default_model("Cu2+"))
    with pytest.raises(InputError, match="levels were computed"):
        doublet_g(levels, which=7)
