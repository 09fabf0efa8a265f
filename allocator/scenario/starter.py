"""What does a first scenario look like: a small commented file to start from."""

from __future__ import annotations

import tomllib
from pathlib import Path

from allocator.errors import Fault, InputError
from allocator.files import written_aside
from allocator.scenario.book_out import write_workbook
from allocator.scenario.read import scenario_from_dict

STARTER = """\
# A scenario to start from: replace the figures, then run
#
#     allocator check FILE      what was understood, and which cautions apply
#     allocator plan FILE       the cheapest plan that meets the target
#
# The firm (Ellerbruck Valves, a maker of small shut-off valves) and all figures are invented.

title = "Shut-off valve"
currency = "EUR"

[demand]
shipped_per_year = 60_000        # good valves shipped per year
years = 5                        # horizon: the life of what is bought, unless it states its own
discount_rate = 0.08             # 8 % a year; both are needed as soon as anything has a price

[target]
final_yield = 0.993              # a valve started comes out, and comes out good; also { nines = 2 } or { ppm = 7_000 }
escape_cost = 90                 # EUR per defect that reaches the customer

[default]                        # holds for every step that says nothing of its own
shift = 0.5                      # drift of the mean over months, in standard deviations
inspection = { finds = 0.90, earlier = 0.10, per_item = 0.04 }    # a step sees 90 % of its own defects, 10 % of those
                                                                  # that came in hidden, for 0.04 EUR per item

# ---- Steps, in the order of the line. Each feeds the next one unless `feeds` names another; the last, the customer.

[[step]]
name = "body casting"
supplier = "Grettwyn Foundry"
cost_added = 2.40                # EUR of material and work added to one item here
capability = { ppm = 9_000 }     # bad items per million, as the supplier counts them
inspection = { finds = 0.50, per_item = 0.08 }   # on arrival
improve = { law = "decade", per_item = 0.06, up_to = { ppm = 1_200 } }    # EUR more per item for every tenfold cut

[[step]]
name = "seat boring"
cost_added = 1.10
capability = { lsl = 11.98, usl = 12.02, mean = 12.004, std = 0.0056, sample = 120 }    # mm; from a study of 120 parts
at_least = { cpk = 1.00 }        # a floor: binds whatever money says
improve = { law = "power", exponent = 1.2, price = 45_000, up_to = { cp = 1.65 } }      # EUR x ((z/z0)^1.2 - 1)

[[step.alternative]]             # one alternative per group is chosen, or none; without `group` it is a "machine"
name = "boring head with gauge"
capability = { cp = 1.55 }       # the offset of the mean stays: a better machine does not centre the process ...
price = 88_000
life_years = 8
resale = 9_000
evidence = "quoted"

[[step.alternative]]
name = "recentre the seat"
group = "setting"
k = 0.02                         # ... a setting does: the mean is then 2 % of the half-width off the middle
price = 3_500
evidence = "judged"

[[step]]
name = "seal fitting"
cost_added = 0.70
opportunities = 2                # two seals, each can be damaged
capability = { dpmo = 1_800 }    # defects per million opportunities
improve = { law = "quotes", points = [ { dpmo = 900, price = 14_000 }, { dpmo = 300, price = 52_000 } ] }    # offers

[[step]]
name = "leak test"
cost_added = 0.45
capability = { yield = 0.9995 }  # the test itself damages 5 in 10,000
inspection = { finds = 0.95, earlier = 0.80, rejects_good = 0.004, per_item = 0.12 }
                                 # finds 80 % of what came in hidden, and rejects 4 of 1,000 good valves
rework = { share = 0.60, cost = 1.50 }           # 60 % of what is found is mended, at 1.50 EUR each
"""


def write_starter(path: str | Path, as_workbook: bool = False) -> None:
    """Write the starter scenario to a new file, as TOML or as a workbook to be filled in.

    Raises
    ------
    InputError
        When a file of that name exists; nothing is overwritten.
    """
    path = Path(path)
    if path.exists():
        raise InputError([Fault(str(path), "", "a file of that name", "name a new file; nothing was overwritten")])
    if as_workbook:
        write_workbook(scenario_from_dict(tomllib.loads(STARTER)), path)
        return
    with written_aside(path) as aside:
        aside.write_text(STARTER, encoding="utf-8", newline="\n")
