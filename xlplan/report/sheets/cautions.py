"""Cautions: what the model leaves out, and what no result of it can replace."""

from __future__ import annotations

from xlplan.report.grid import Grid
from xlplan.report.safe_book import SafeBook
from xlplan.report.tables import CAUTION_LINES, CAUTIONS

LICENSED = "Licensed engineering review"
AUTHORITY = "Local codes, and the interconnection authority having jurisdiction"

CAUTION_TEXTS = (
    (
        "Support, not approval",
        "These results help to choose what to study further. They never replace protection and "
        "switching studies, and nothing here is approval to build, connect or operate anything.",
        f"{LICENSED}; {AUTHORITY[0].lower()}{AUTHORITY[1:]}",
    ),
    (
        "Backfeed and worker safety",
        "Islands, ties and local sources can make a line live from a side where crews do not "
        "expect it. Every source needs a visible open point that can be locked, and lines count "
        "as live until they are tested, isolated and grounded.",
        "The utility's own safety rules and switching procedures; local codes",
    ),
    (
        "Running as an island",
        "An island needs system grounding that suits it, anti-islanding protection that knows "
        "when an island is meant, interlocks against closing out of step, and fault currents "
        "large enough for its protection to see. None of this is modelled.",
        f"{AUTHORITY}; {LICENSED[0].lower()}{LICENSED[1:]}",
    ),
    (
        "Protection is not coordinated here",
        "The nearest protective device above a fault is taken to clear it, always and alone. "
        "Settings, fuse saving, sympathetic trips, failed breakers, and reach with new sources "
        "on the feeder are not checked.",
        "A protection study",
    ),
    (
        "No stability, transients or inrush",
        "Motor starting, transformer inrush, frequency and voltage stability of islands, load "
        "steps and harmonics are left out. Supply that the model restores may not hold in life.",
        "Dynamic studies of each island that is to be used",
    ),
    (
        "Cold-load pickup",
        "Load after an outage is taken as if there had been none. After hours without supply, "
        "heating and cooling load may come back well above it for some time (common practice "
        "is to restore in steps).",
        "Switching procedures; measured load of past restorations",
    ),
    (
        "Balanced, linear, without losses",
        "The feeder is a balanced single-phase equivalent with linear power flow; losses enter "
        "only as an allowance on load. Unbalance, single-phase laterals and voltage on each "
        "phase may be worse than shown.",
        "A three-phase power flow before anything is built",
    ),
    (
        "Voltage",
        "Plans keep the study's bands in the linear model, whose voltages come out too high by "
        "about the square of the drop (up to 0.003 p.u. at a drop of 0.05, 0.014 at 0.10, on 200 "
        "random feeders; never too low). So a lowest limit tightened by the square of the largest "
        "drop and a loss allowance of half of it are a start; the Voltages sheet says what this "
        "study would have needed. Regulators and taps have fixed boosts, and loads do not change "
        "with voltage.",
        "The Voltages sheet; a three-phase power flow; the voltage standard that applies",
    ),
    (
        "One failure at a time",
        "Nothing else fails until a failure is repaired. In great storms many things fail at once "
        "and crews are short: such days are worse than shown.",
        "Storm records; the event counts on the Reliability sheet",
    ),
    (
        "Failures by chance alone",
        "Failures follow a Poisson clock with given yearly rates; ageing, common causes and "
        "failed switching are left out. Rates and repair times decide the result, and "
        "published averages may be far from this feeder's.",
        "The utility's own outage records",
    ),
    (
        "What an outage costs customers",
        "Costs of interruptions are survey averages by class and duration. They differ widely "
        "between customers, and no customer is asked to pay them.",
        "The board's judgement; surveys of the feeder's own customers",
    ),
    (
        "The windows stand for the year",
        "A few windows with their occurrences stand for the whole year; each window begins with "
        "everything in service. Weather, load and prices beyond them are not seen, and future "
        "growth is not included.",
        "Load forecasts; more windows in the study",
    ),
    (
        "Foresight within a window",
        "Load, sun, wind and prices of a window are taken as known when it begins; only failures "
        "come by surprise. Real operation will do somewhat worse.",
        "Operating experience",
    ),
    (
        "Where storage may stand",
        "Fire separation, ventilation, gas detection, access for fire services, noise and flood "
        "levels may rule out a bus or change its cost. None of it is in the model.",
        "Local fire and building codes; the fire service; the authority having jurisdiction",
    ),
    (
        "Wear of storage and engines",
        "Capacity does not fade and engines start with the chances given. Warranties, cycles, "
        "fuel storage permits and emission limits are not checked.",
        "Makers' warranties; local environmental permits",
    ),
    (
        "Money",
        "Costs are real, before tax, at one discount rate. Price changes, financing, ownership "
        "and rules about who may own storage are left out.",
        "The utility's finance staff; the regulator",
    ),
    (
        "A weight on bad outcomes",
        "Where the study sets one, bad outcomes are the worst of single window occurrences: "
        "nothing fails, or a first failure with the average of what may follow. They are no bad "
        "years and no series of failures, and the plan may cost more on average.",
        "The board's judgement; the same study with weight 0",
    ),
    (
        "Statistical figures",
        "Costs found by sampling have an interval, and another seed gives other figures within "
        "about that interval. A difference whose interval includes 0 is no finding.",
        "A longer run with more samples",
    ),
)
"""Topic, what to keep in mind, who or what settles it."""


def write(book: SafeBook) -> None:
    """Writes the sheet."""
    sheet = book.sheet(CAUTIONS)
    sheet.head(
        "Read this before using the results",
        f"{len(CAUTION_TEXTS)} cautions. All of them defer to local codes, the interconnection "
        "authority having jurisdiction, and licensed engineering review.",
    )
    sheet.widths([6, 30, 90, 42])
    grid = Grid(CAUTIONS, 3, CAUTION_LINES, len(CAUTION_TEXTS))
    grid.write(
        sheet,
        [
            {"number": float(i + 1), "topic": topic, "caution": caution, "decides": decides}
            for i, (topic, caution, decides) in enumerate(CAUTION_TEXTS)
        ],
    )
    sheet.freeze(4, 0)
    sheet.print_setup(grid.below - 1, len(CAUTION_LINES) - 1, is_one_page=True)
