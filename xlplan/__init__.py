"""xlplan: resilience plans for radial distribution feeders, from workbook to workbook.

The folders, in the order in which data flows through them:

base      errors and findings, unit conversions, random streams
schema    one JSON Schema per input sheet: every field is described once
workbook  cells without meaning: reading, checking, template, marked copies
study     what the planner meant: frozen records in kW, kWh, hours and fractions
network   the radial feeder as arrays
outages   what fails, how often, and whom it reaches
model     the mathematics: linear programs, no files and no solver calls
solve     linear programs in, solutions out; knows no bus and no kW
evaluate  solutions back to meaning: costs by part, reliability indices, audits
compare   several plans side by side
report    results workbook and JSON twin; computes nothing
"""

import os

# Before anything imports NumPy. Its linear algebra would start a thread for each core in every
# process: no gain on arrays this small, a loss beside other work, and digits that depend on the
# number of cores. Whoever sets the variable has their way.
os.environ.setdefault("OMP_NUM_THREADS", "1")

__version__ = "0.1.0"
