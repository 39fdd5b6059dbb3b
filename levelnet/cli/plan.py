"""``--plan``: what a command will take, printed in place of doing it."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from .output import print_json, row, size_text, time_text

if TYPE_CHECKING:
    from ..studies.plans import Plan


def add_plan(parser: argparse.ArgumentParser, *more_names: str) -> None:
    """Declare the option; `more_names` are further spellings of it."""
    parser.add_argument(
        "--plan",
        *more_names,
        action="store_true",
        help="check what is asked, print the memory and time that it will take, and stop",
    )


def print_plan(plan: Plan, as_json: bool) -> int:
    """Print a plan that fits; exit code 0."""
    if as_json:
        print_json(
            {
                "what": plan.what,
                "setup_digest": plan.setup_digest,
                "runs": plan.runs,
                "workers": plan.workers,
                "memory_bytes": plan.memory_bytes,
                "available_bytes": plan.available_bytes,
                "seconds": plan.seconds,
                "processor_seconds": plan.processor_seconds,
                "first_use_of": list(plan.first_use_of),
                "first_use_seconds": plan.first_use_s,
            }
        )
        return 0
    by = f" by {plan.workers} processes" if plan.workers > 1 else ""
    print(row("plan", f"{plan.what} is valid; nothing was computed"))
    print(row("runs", f"{plan.runs}{by}"))
    print(row("memory", f"{size_text(plan.memory_bytes)} of {_available(plan)} available"))
    print(row("time", f"{time_text(plan.seconds)}, to a factor of two or three"))
    if plan.first_use_of:
        what = ", ".join(plan.first_use_of)
        seconds = time_text(plan.first_use_s)
        print(row("of it first use", f"on this machine: about {seconds} of compilation ({what})"))
    if plan.workers > 1:
        print(row("on one processor", time_text(plan.processor_seconds)))
    return 0


def _available(plan: Plan) -> str:
    known = plan.available_bytes < float("inf")
    return size_text(plan.available_bytes) if known else "an unknown amount"
