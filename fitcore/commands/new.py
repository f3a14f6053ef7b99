"""`weakmix new`: a commented inputs file to start from."""

from __future__ import annotations

from pathlib import Path

import click

from fitcore.commands.errors import input_error
from fitcore.commands.options import quiet_option
from fitcore.commands.output import Output

TEMPLATE = """\
# An inputs file of weakmix: what was measured, in TOML.
# This one loads and fits as it stands (the numbers are invented):
#
#   weakmix show {name}
#   weakmix fit {name}

title = "My inputs"
revision = 1

# Start from a bundled set (averages-2026, world-2026, ...) or another file; an entry below with the same id
# replaces the included one, and `drop` removes one.
# include = ["averages-2026"]
# drop = ["frequency-Bd"]

[[measurement]]
id = "element-us"                       # unique; --only, --without, --set and results use it
quantity = "magnitude_V_us"             # what was measured: `weakmix find WORDS` searches the names
value = 0.2308
error = 0.0008
unit = "1"                              # always written; "1" is dimensionless, "%" is understood too
groups = ["tree", "magnitude"]          # any words; --only tree keeps these entries alone
source = "invented"                     # required: where the number is from

[[measurement]]
id = "element-cb"
quantity = "magnitude_V_cb"
value = 0.0420
errors = {{ statistical = 0.0005, form_factor = 0.0007 }}   # named sources; one name in two entries = shared
unit = "1"
groups = ["tree", "magnitude"]
source = "invented"
note = "a name that two entries share (here form_factor) makes them correlated; 'statistical' never does"

[[measurement]]
id = "element-ub"
quantity = "magnitude_V_ub"
value = 3.52e-3
errors = {{ statistical = 0.10e-3, form_factor = 0.12e-3 }}
unit = "1"
inflate = 1.2                           # scale factor on the error; give its reason in `note`
note = "scale factor: the two methods behind this average disagree a little"
groups = ["tree", "magnitude"]
source = "invented"

[[measurement]]
id = "gamma"
quantity = "angle_gamma"
value = 57.0
error = [3.1, 2.8]                      # plus, minus
unit = "deg"
groups = ["tree", "tree-phase"]
source = "invented"

[[measurement]]
id = "beta"
quantity = "angle_beta"
value = 0.361
error = 0.012
unit = "rad"                            # any unit that fits: it is converted to the catalogue's (deg)
groups = ["loop", "cp-asymmetry"]
source = "invented"

# Several values measured together:
#
# [[correlated]]
# id = "charm-elements"
# quantities = ["magnitude_V_cd", "magnitude_V_cs"]
# values = [0.2305, 0.972]
# errors = [0.0025, 0.006]
# units = ["1", "1"]
# correlation = [[1.0, 0.2], [0.2, 1.0]]
# source = "invented"
#
# A correlation between any two entries, included ones too:
#
# [[correlation]]
# between = ["element-us", "gamma"]
# coefficient = 0.1
#
# A theory input is a measurement of a parameter:
#
# [[measurement]]
# id = "bag-K"
# quantity = "bag_K"
# value = 0.760
# error = 0.010
# flat_halfwidth = 0.005                # additional flat theory range
# unit = "1"
# kind = "theory"
# recalled = true                       # quoted from memory: shown until someone re-reads the source
# source = "invented"
#
# Settings of a parameter (start, lower, upper, fixed), in its catalogue unit (`weakmix recipe NAME`):
#
# [parameters.wolfenstein_etabar]
# lower = 0.0
"""


@click.command("new")
@click.argument("file", metavar="FILE", type=click.Path(path_type=Path))
@quiet_option
def command(file: Path, quiet: bool) -> None:
    """Write a commented inputs file to FILE; it loads and fits as it stands.

    \b
      weakmix new mine.toml
    """
    from observables.errors import StoreError

    if not file.parent.is_dir():
        message = f"{file}: the folder {file.parent} does not exist; make it first"
        raise input_error(message)
    try:
        with file.open("x", encoding="utf-8") as stream:  # x: never overwrites
            stream.write(TEMPLATE.format(name=file))
    except FileExistsError as error:
        message = f"{file}: exists already and was not touched; give another name"
        raise input_error(message) from error
    except OSError as error:
        message = f"{file}: cannot be written ({error.strerror})"
        raise StoreError(message) from error
    output = Output(quiet=quiet)
    output.headline("inputs", f"template written to {file}")
    output.show(f"Next: edit it, then `weakmix show {file}` and `weakmix fit {file}`")
