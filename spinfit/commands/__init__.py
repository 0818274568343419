"""The commands, one module each.

A command is a module with

    NAME, SUMMARY        what it is called and one line on what it does
    EXAMPLES             command lines shown by --help
    options(parser)      adds its arguments to an argparse parser
    run(args, screen)    does it and returns the exit code

and a line in `TABLE`.  Modules are light to import: what computes, reads or draws is imported inside
`run`, so that ``spinfit --help`` answers at once.
"""

from __future__ import annotations

from types import ModuleType

from spinfit.commands import (
    batch,
    calibrate,
    completion,
    convert,
    diagram,
    fit,
    inspect,
    ion,
    lines,
    quantify,
    quench,
    rerun,
    simulate,
    summary,
    tune,
)

_MODULES = (
    fit,
    tune,
    batch,
    summary,
    rerun,
    simulate,
    inspect,
    calibrate,
    quantify,
    convert,
    ion,
    quench,
    lines,
    diagram,
    completion,
)
TABLE: dict[str, ModuleType] = {module.NAME: module for module in _MODULES}
