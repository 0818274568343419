"""``spinfit quench``: free-ion g against crystal-field g against measured g; which ion a measured g may be."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.screen import Screen, number
from spinfit.errors import InputError

NAME = "quench"
SUMMARY = "free-ion g against crystal-field g against measured g"
EXAMPLES = (
    "spinfit quench Cu2+ Ni2+ Er3+",
    'spinfit quench Cu2+ --measured "2.05, 2.06, 2.33(1)"',
    "spinfit quench Cu2+ --field glass.toml --outcome kiln-07/outcome.json",
    'spinfit quench --measured "2.05, 2.06, 2.33" --candidates',
    "spinfit quench --doublets 5/2 --plot doublets.png",
)


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("ion", nargs="*", metavar="ION", help="Cu2+, Er(III), ...; with --field, all ions of the file")
    parser.add_argument("--field", metavar="FILE.toml", help="crystal fields; typical ones, named, are used without")
    parser.add_argument(
        "--measured", action="append", metavar="G", help='measured g, "2.05, 2.06, 2.33(1)"; once for each ion'
    )
    parser.add_argument("--outcome", metavar="FILE", help="outcome.json of a fit, whose g is the measured one")
    parser.add_argument("--species", metavar="NAME", help="with --outcome: whose g")
    parser.add_argument("--candidates", action="store_true", help="list ions and states that could have the g")
    parser.add_argument("--doublet", metavar="N", help="g of the N-th Kramers doublet in place of the ground state's")
    parser.add_argument("--doublets", metavar="S", help="table of effective g of all doublets of a spin against E/D")
    parser.add_argument("--temperatures", metavar="QUANTITY", help='effective moments too, such as "2, 77, 300 K"')
    parser.add_argument("--g-spin", metavar="G", help="g of the spin (default: the free electron's, CODATA)")
    parser.add_argument("--plot", metavar="FILE", help="draw it (.png, .svg or .pdf)")
    parser.add_argument("--levels", metavar="FILE", help="draw the levels of the one ion (.png, .svg or .pdf)")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Compare and print."""
    for picture in (args.plot, args.levels):
        if picture is not None:
            from spinfit.commands.drawing import picture_kind

            picture_kind(picture)
    if args.doublets is not None:
        return _doublets(args, screen)
    if args.candidates:
        return _candidates(args, screen)
    return _compare(args, screen)


def _measured(args: argparse.Namespace) -> list[Any]:
    """Return the measured g of the command line, in order."""
    from spinfit.ion.quench import parse_measured

    if args.measured and args.outcome:
        raise InputError("stands beside --measured", "give one of the two", place="--outcome")
    if args.species is not None and not args.outcome:
        raise InputError("stands without --outcome", "give the outcome.json it belongs to", place="--species")
    if args.outcome:
        return [_from_outcome(args.outcome, args.species)]
    try:
        return [parse_measured(text) for text in args.measured or ()]
    except InputError as error:
        raise InputError(error.found, error.right, place="--measured") from None


def _from_outcome(path: str, species: str | None) -> Any:
    """Read the measured g from an outcome.json."""
    import json

    from spinfit.ion.quench import measured_from_parameters

    right = "give the outcome.json that spinfit fit wrote"
    try:
        with open(path, encoding="utf-8") as stream:
            content = json.load(stream)
        parameters = content["parameters"]
    except FileNotFoundError:
        raise InputError("there is no such file", right, file=path) from None
    except (OSError, ValueError, TypeError, KeyError, RecursionError):
        raise InputError("is not an outcome", right, file=path) from None
    try:
        return measured_from_parameters(parameters, species)
    except InputError as error:
        raise error.at(file=path) from None
    except (AttributeError, KeyError, TypeError, ValueError):
        raise InputError("is not an outcome", right, file=path) from None


def _candidates(args: argparse.Namespace, screen: Screen) -> int:
    from spinfit.ion.assignment import candidates
    from spinfit.report.ion_tables import candidate_table

    right = 'write --measured "2.05, 2.06, 2.33"'
    if args.ion or args.field or args.doublet or args.plot or args.levels:
        raise InputError("takes a measured g and nothing else", right, place="--candidates")
    measured = _measured(args)
    if len(measured) != 1:
        raise InputError(f"wants one measured g, not {len(measured)}", right, place="--candidates")
    found = candidates(measured[0])
    screen.emit({"measured": list(measured[0].values), "candidates": [c.as_record() for c in found]})
    screen.say(candidate_table(found))
    return 0


def _doublets(args: argparse.Namespace, screen: Screen) -> int:
    import numpy as np

    from spinfit.ion.kramers import doublet_matches, doublet_table
    from spinfit.ion.names import half
    from spinfit.report.ion_tables import doublets_table, matches_table

    if args.ion or args.field or args.doublet or args.candidates:
        raise InputError("takes a spin and perhaps a measured g", "write --doublets 5/2", place="--doublets")
    S, g = _spin(args.doublets), number(args.g_spin, "--g-spin", positive=True)
    g = 2.0 if g is None else g
    rhombicity = np.linspace(0, 1 / 3, 11)
    record: dict[str, Any] = {"S": half(S), "g": g, "rhombicity": rhombicity.tolist()}
    record["doublets"] = doublet_table(S, rhombicity, g=g).tolist()
    measured = _measured(args)
    if len(measured) > 1:
        raise InputError(f"{len(measured)} measured g", "give one", place="--measured")
    matches = []
    if measured:
        sigma = measured[0].uncertainties if all(measured[0].uncertainties) else None
        matches = doublet_matches(measured[0].values, uncertainty=sigma, spins=(S,), g=g)
        record["matches"] = [match.as_record() for match in matches]
    screen.emit(record)
    screen.say(doublets_table(S, rhombicity, g=g))
    if matches:
        screen.say()
        screen.say(matches_table(matches))
    if args.plot:
        from spinfit.commands.drawing import save_picture
        from spinfit.report.ion_plots import doublets_figure

        save_picture(args.plot, doublets_figure(S, g=g, measured=measured[0].values if measured else ()))
    return 0


def _spin(text: str) -> float:
    """Read "5/2" or 2.5."""
    whole, slash, under = text.partition("/")
    try:
        value = float(whole) / float(under) if slash else float(whole)
    except (ValueError, ZeroDivisionError):
        value = float("nan")
    if not (1.5 <= value <= 7.5 and float(2 * value).is_integer() and round(2 * value) % 2):
        raise InputError(f'"{text}" is not a spin with Kramers doublets', "write 3/2, 5/2 or 7/2", place="--doublets")
    return value


def _compare(args: argparse.Namespace, screen: Screen) -> int:
    from spinfit.ion.names import parse_name

    given = {}
    if args.field:
        from spinfit.files.toml_crystal_field import read_crystal_fields

        given = read_crystal_fields(args.field)
    names = [parse_name(name).name for name in args.ion] or list(given)
    if not names:
        raise InputError("no ion is named", "write e.g. spinfit quench Cu2+ Ni2+", place="quench")
    missing = [name for name in names if given and name not in given]
    if missing:
        raise InputError(
            f"{missing[0]} is not in the file", f"it has {', '.join(given)}", file=args.field, place="--field"
        )
    measured = _measured(args) or [None if name not in given else given[name].measured for name in names]
    if len(measured) != len(names):
        option = "--outcome" if args.outcome else "--measured"
        right = f"give one {option} for each ion, in their order"
        raise InputError(f"{len(measured)} measured g for {len(names)} ions", right, place=option)
    models = {name: ion.model for name, ion in given.items()}
    if args.doublet is not None:
        return _one_doublet(args, names, models, screen)
    return _table(args, names, models, measured, screen)


def _table(
    args: argparse.Namespace, names: list[str], models: dict[str, Any], measured: list[Any], screen: Screen
) -> int:
    from spinfit.ion.quench import quench_row
    from spinfit.report.ion_tables import moments_table, needed_table, quench_table

    g_spin, temperatures = number(args.g_spin, "--g-spin"), _temperatures(args.temperatures)
    rows = [
        quench_row(name, model=models.get(name), measured=m, g_spin=g_spin, temperatures=temperatures)
        for name, m in zip(names, measured, strict=True)
    ]
    needs = [_needs(name, models.get(name), row) for name, row in zip(names, rows, strict=True)]
    screen.emit(
        [row.as_record() | {"needed": [n.as_record() for n in need]} for row, need in zip(rows, needs, strict=True)]
    )
    screen.say(quench_table(rows))
    for name, need in zip(names, needs, strict=True):
        if need:
            screen.say(f"\n{name}: what would bring the model to the measurement\n{needed_table(need)}")
    if temperatures:
        screen.say(f"\n{moments_table(rows)}")
    if args.plot:
        from spinfit.commands.drawing import save_picture
        from spinfit.report.ion_plots import comparison_figure

        save_picture(args.plot, comparison_figure(rows))
    if args.levels:
        from spinfit.commands.drawing import save_picture
        from spinfit.ion.defaults import default_model
        from spinfit.report.ion_plots import level_figure

        if len(names) != 1:
            raise InputError(f"{len(names)} ions", "name one ion to draw its levels", place="--levels")
        save_picture(args.levels, level_figure(models.get(names[0]) or default_model(names[0])))
    return 0


def _temperatures(text: str | None) -> tuple[float, ...]:
    """Read "2, 77, 300 K"."""
    from spinfit.units import parse

    if text is None:
        return ()
    values = parse(text, "temperature", "--temperatures", count=None)[0]
    if min(values) <= 0:
        raise InputError(f"{min(values):g} K", "write positive temperatures", place="--temperatures")
    return values


def _needs(name: str, model: Any, row: Any) -> tuple[Any, ...]:
    """Return which k and which splitting the measurement asks for, where the model has a g at all."""
    from spinfit.ion.defaults import default_model
    from spinfit.ion.inverse import needed_reduction, needed_splitting

    if row.measured is None or row.g_crystal is None:
        return ()
    model = default_model(name) if model is None else model
    found = needed_reduction(model, row.measured)
    if row.kind == "spin Hamiltonian" and row.mixing:
        found += needed_splitting(model, row.measured)
    return found


def _one_doublet(args: argparse.Namespace, names: list[str], models: dict[str, Any], screen: Screen) -> int:
    """Print g of the N-th doublet of each ion."""
    from spinfit.ion.defaults import default_model
    from spinfit.ion.model import solve
    from spinfit.ion.tensors import doublet_g
    from spinfit.report.ion_tables import doublet_lines

    if not args.doublet.isdecimal() or not 1 <= int(args.doublet) <= 1000:
        raise InputError(f'"{args.doublet}" is not a number of a level', "write 1 for the lowest", place="--doublet")
    found = []
    for name in names:
        model = models.get(name) or default_model(name)
        found.append((name, model.crystal.remark, doublet_g(solve(model), which=int(args.doublet) - 1)))
    screen.emit([{"ion": name, "crystal_field": remark} | doublet.as_record() for name, remark, doublet in found])
    screen.say(doublet_lines(found))
    return 0
