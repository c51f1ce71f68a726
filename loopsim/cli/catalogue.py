"""Every verb of the command with its options, as one table."""

from __future__ import annotations

from loopsim.cli import values
from loopsim.cli.options import Option, Verb

SET = Option("--set", "LET=VALUE", "give a let another value, as --set level=4.5V; repeatable", values.setting, repeatable=True)
JSON = Option("--json", "", "one JSON document on standard output (docs/reference/json.md)")
CSV = Option("--csv", "FILE", "write the table to FILE, numbers in SI units with all their digits", values.report)
PLOT = Option("--plot", "FILE", "draw it; the suffix decides: svg, png or pdf (extra `plot`)", values.picture)
BOX = Option("--box", "VOLTS", "look at all net voltages within +/- VOLTS (1 kV)", values.positive_volts)
BUDGET = Option("--budget", "SECONDS", "stop after SECONDS and say what is left (60 s)", values.positive_seconds)
SEED = Option("--seed", "N", "start of the random numbers, where a verb draws any (0)", values.whole)
JOBS = Option("--jobs", "N", "worker processes, where a verb uses any (one a core)", values.count)
WATCH = Option("--watch", "NET,...", "the nets to show", values.names)

COMMON = (
    Option("--quiet", "", "nothing on standard error but errors"),
    Option("--no-color", "", "no colour codes"),
)

STATES = Verb(
    "states",
    "FILE",
    "every DC operating point, the proof that there are no others, the verdict on each",
    (
        ("loopsim states circuits/comparators/cistern_pump.loop", "the table"),
        ("loopsim states cistern_pump.loop --set level=8V", "the same with another level"),
        ("loopsim states cistern_pump.loop --json", "for programs: every net, current and eigenvalue"),
    ),
    (SET, JSON, CSV, BOX, BUDGET, SEED, JOBS),
    "loopsim.cli.states:run",
    "complete: proved that there are no others within the box. found: search only. undecided: places left over.",
)

TRACE = Verb(
    "trace",
    "FILE",
    "the whole static characteristic through its folds, and where it jumps",
    (
        ("loopsim trace circuits/comparators/cistern_pump.loop --along level", "folds, thresholds, hysteresis"),
        ("loopsim trace cistern_pump.loop --along level --over 3V..6V --watch out,plus", "part of the range, two nets"),
        ("loopsim trace cistern_pump.loop --along level --plot curve.svg", "drawn: solid stable, dashed unstable"),
        ("loopsim trace cistern_pump.loop --along level --overlay bench.csv", "how far measured points lie from it"),
    ),
    (
        Option("--along", "LET", "the let that moves: a source, a value, a field, `ambient`"),
        Option("--over", "LO..HI", "its range (the one the file gives with `in`)", values.span),
        WATCH,
        Option("--versus", "NET", "draw the watched nets over this net instead of over the let"),
        Option("--overlay", "FILE", "measured points, let and net in two columns: draws them, tells the largest distance"),
        Option("--stations", "N", "values between the ends at which every state is proved (9)", values.stations),
        SET,
        JSON,
        CSV,
        PLOT,
        BOX,
        BUDGET,
    ),
    "loopsim.cli.trace:run",
    "complete over the range: proved for every value of the let. complete at N stations: proved there, found between them.",
)

START = Option("--start", "START", "off (supplies come up), the letter of a state, or net=volts,... (off)", values.start)
NUDGE = Option("--nudge", "VOLTS", "leave the start along its fastest growth; the sign chooses the side", values.volts)
TOLERANCE = Option("--tolerance", "SHARE", "wanted error over amplitude (1e-5, a cycle 1e-8)", values.share)

TRANSIENT = Verb(
    "transient",
    "FILE",
    "response in time, and the state it ends in",
    (
        ("loopsim transient circuits/comparators/cistern_pump.loop --for 1ms", "from supplies off, as they come up"),
        ("loopsim transient cistern_pump.loop --for 1ms --start B --nudge 1mV", "leaving the unstable state upwards"),
        ("loopsim transient cistern_pump.loop --for 1ms --csv run.csv --plot run.svg", "as a table and as a picture"),
    ),
    (
        Option("--for", "TIME", "how long to follow it", values.positive_seconds),
        START,
        NUDGE,
        Option("--ramp", "TIME", "how long supplies take to come up (a hundredth of --for)", values.positive_seconds),
        WATCH,
        TOLERANCE,
        SET,
        JSON,
        CSV,
        PLOT,
    ),
    "loopsim.cli.motion:run_transient",
)

CYCLE = Verb(
    "cycle",
    "FILE",
    "sustained oscillation: period, frequency, duty, swing, multipliers",
    (
        ("loopsim cycle circuits/oscillators/cistern_blinker.loop", "the oscillation that starts with the supplies"),
        ("loopsim cycle cistern_blinker.loop --start out=1V --plot cycle.svg", "from another start, drawn"),
    ),
    (
        START,
        NUDGE,
        Option("--for", "TIME", "look for it for at most this long (until it repeats)", values.positive_seconds),
        WATCH,
        TOLERANCE,
        BUDGET,
        SET,
        JSON,
        CSV,
        PLOT,
    ),
    "loopsim.cli.motion:run_cycle",
)

INSPECT = Verb(
    "inspect",
    "FILE",
    "what was read: parts, nets, unknowns, structure findings",
    (("loopsim inspect circuits/comparators/cistern_pump.loop", "what loopsim makes of the file"),),
    (SET, JSON),
    "loopsim.cli.inspect:run",
)

TIDY = Verb(
    "tidy",
    "FILE",
    "lays a circuit file out in the standard way, in place",
    (
        ("loopsim tidy circuits/comparators/cistern_pump.loop", "rewrites the file; its meaning and comments stay"),
        ("loopsim tidy cistern_pump.loop --check", "only tells: exit code 1 when it would change"),
    ),
    (Option("--check", "", "change nothing, only tell"),),
    "loopsim.cli.tidy:run",
)

VERIFY = Verb(
    "verify",
    "PATH...",
    "every requirement of every circuit below PATH",
    (
        ("loopsim verify circuits", "a line for each requirement, worst first"),
        ("loopsim verify circuits --select start_high", "only the requirements of that name"),
        ("loopsim verify circuits --junit report.xml --annotations", "for a CI server"),
        ("loopsim verify circuits --baseline accepted.json", "and what moved since the baseline"),
    ),
    (
        Option("--list", "", "name the requirements, judge none"),
        Option("--select", "PATTERN", "only these: a label, a circuit or circuit::label, with * and ?; repeatable", repeatable=True),
        Option("--require-proof", "", "met only by what is proved; the rest is undecided"),
        Option("--set", "LET=VALUE", "give a let another value where a circuit has it; repeatable", values.setting, repeatable=True),
        BOX,
        Option("--budget", "SECONDS", "wall time for each circuit (60 s)", values.positive_seconds),
        Option("--jobs", "N", "worker processes (one a core)", values.count),
        Option("--cluster", "ADDRESS", "work on a dask.distributed scheduler, as tcp://host:8786 (extra `cluster`)"),
        Option("--journal", "FILE", "finished circuits, so that a killed run goes on (.loopsim-journal)"),
        Option("--fresh", "", "forget the journal, judge everything anew"),
        JSON,
        CSV,
        Option("--junit", "FILE", "write a JUnit report to FILE", values.report),
        Option("--summary", "FILE", "write a page in Markdown to FILE, for the summary of a CI job", values.report),
        Option("--annotations", "", "error lines that a CI server shows beside the source"),
        Option("--timings", "", "with wall times in --json and --junit; without, equal runs write equal files"),
        Option("--baseline", "FILE", "compare with a stored run: what moved, appeared or vanished", values.report),
        Option("--accept", "", "store this run as the baseline"),
    ),
    "loopsim.cli.verify:run",
    "undecided is never a pass. A requirement that the baseline holds and the run does not is reported as violated until accepted.",
)

VERBS = {verb.name: verb for verb in (STATES, TRACE, TRANSIENT, CYCLE, VERIFY, INSPECT, TIDY)}

# Named in the design, not built yet: asked for, they get an answer that says so.
PLANNED = {
    "loops": "feedback loops with their return ratio and margins",
    "spread": "what tolerances do to thresholds and requirements",
    "report": "one HTML page for a design review",
}
