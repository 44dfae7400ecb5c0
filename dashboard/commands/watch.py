"""``rampside watch CONFIG``: a ramp on a person's own instruments."""

from __future__ import annotations

import argparse

from dashboard.configuration import load_configuration
from dashboard.interrupts import asked_to_end
from dashboard.page_address import page_address
from dashboard.terminal import open_view
from dashboard.watch import WatchPlan, watch
from dashboard.words import told


def run(arguments: argparse.Namespace) -> int:
    """Watch until Ctrl-C, or as bounded on the command line; then say what was found."""
    rig, config = load_configuration(arguments.config)
    return run_plan(
        WatchPlan(
            rig,
            config,
            arguments.folder,
            arguments.port,
            page_address(arguments.page_address, arguments.page_secret),
            not arguments.no_browser,
            arguments.exit,
            arguments.seconds,
            arm_hold=arguments.arm_hold,
            bell=arguments.bell,
        )
    )


def run_plan(plan: WatchPlan) -> int:
    """Carry out a plan in the terminal; exit status 0."""
    with asked_to_end() as wish:
        with open_view(plan.rig) as view:
            run, summary = watch(plan, view, wish)
        view.say(f"{told(summary)}\nRun:  {run.path}")
    return 0
