"""Do the reported intervals hold the known answers? The calibration table: python3 scripts/verify.py

Without a section: coverage of the 95 percent intervals over all reference cases of tests/reference. Sections:

  --control     plain bursts on chaotic systems, with and without the part of the error from cell size
  --convection  the three-variable convection flow: plain, reseeded, and one long run of as many steps
  --accuracy    the cases in cases/ at three accuracies: reached or not, and at what cost
  --crosscheck  verdicts of the crosscheck: false alarms, a wrong density, published exponents, regimes, short runs
  --truths      computes the reference values of cases/ and of the convection flow that --accuracy and --convection use

Results go to standard output, progress to standard error. Exit status 0: all stated criteria hold; 1: not.
"""

# No `from __future__ import annotations`, for the reason given in _environment.py.
import argparse
import importlib.util
import sys
from pathlib import Path

from _environment import ROOT, prepare, run

SECTIONS = ("coverage", "control", "convection", "accuracy", "crosscheck", "truths")


def parser() -> argparse.ArgumentParser:
    """Arguments of this script."""
    made = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    for name in SECTIONS:
        made.add_argument("--" + name, action="store_true", help="run the section " + name)
    made.add_argument(
        "--seeds", metavar="N", type=positive, help="seeds of each case (coverage, control and crosscheck: 20)"
    )
    made.add_argument("--short", action="store_true", help="fewer seeds and cases, for a few minutes on two cores")
    made.add_argument("--cases", metavar="P01,P22", default="", help="only the cases whose names start so")
    made.add_argument("--json", metavar="FILE", help="write every comparison of the section coverage")
    return made


def positive(text: str) -> int:
    """A whole number from 1 on."""
    number = int(text)
    if number < 1:
        raise argparse.ArgumentTypeError(f"found {text}; allowed: a whole number from 1 on")
    return number


def is_ready() -> bool:
    """Whether this Python imports perdure from this checkout."""
    found = importlib.util.find_spec("perdure")
    return found is not None and ROOT / "src" in Path(str(found.origin)).resolve().parents


def main(arguments: "list[str]") -> int:
    """0 if all criteria of the sections hold, else 1."""
    options = parser().parse_args(arguments)
    if not is_ready():
        prepare()
        # the environment runs in the checkout, so a relative name would mean another file
        place = ["--json", str(Path(options.json).resolve())] if options.json else []
        return run("python", str(Path(__file__).resolve()), *arguments, *place)
    sys.path.append(str(ROOT / "tests"))
    from _verify.sections import run_sections

    chosen = [name for name in SECTIONS if getattr(options, name)] or ["coverage"]
    return run_sections(chosen, options)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
