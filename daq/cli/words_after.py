"""The words for runs that have ended: report, archive, blinding, many nights."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from daq.cli.words_shared import RUN, add
from daq.records import VERDICTS


def scale_words(commands: Any) -> None:
    """Add the commands of many nights."""
    many = "draw many nights, made up or rehearsed, and tell what they say"
    study = add(commands, "study", "study:study", many, "tercet study studies/coverage.toml --workers 2")
    study.add_argument("file", type=Path, metavar="FILE", help="a study (TOML)")
    study.add_argument("--draws", type=int, metavar="N", help="how many draws (as described)")
    study.add_argument("--block", type=int, metavar="N", help="draws a worker gets at once (as described)")
    study.add_argument("--into", type=Path, metavar="FOLDER", help="where draws are kept (studies/NAME)")
    _workers(study)
    taken = "estimate archived runs anew and take them together"
    pool = add(commands, "pool", "pool:pool", taken, "tercet pool lab/runs/*-lantern --picture forest.svg")
    where = "a run folder, a zip of one, or an address like s3://bucket/run.zip"
    pool.add_argument("run", nargs="+", metavar="RUN", help=where)
    pool.add_argument("--picture", type=Path, metavar="FILE", help="draw the forest (.svg, .png or .pdf)")
    pool.add_argument("--into", type=Path, metavar="FOLDER", help="keep the figures of each run there")
    _workers(pool)


def _workers(one: argparse.ArgumentParser) -> None:
    one.add_argument("--workers", type=int, default=0, metavar="N", help="worker processes here; 0: none (0)")
    one.add_argument("--cluster", metavar="ADDRESS", help="a dask scheduler, like tcp://host:8786")


def blind_words(commands: Any) -> None:
    """Add the command of the blinding."""
    hide = "hide a run's kappa behind an offset, freeze its analysis, reveal it"
    blind = add(commands, "blind", "blinding:blind", hide, f"tercet blind {RUN} --freeze")
    blind.add_argument("run", type=Path, metavar="RUN", help="a run folder in its lab")
    blind.add_argument("--scope", default="run", metavar="NAME", help="a campaign with one offset (run)")
    wide = "half width of the offset, like 0.001 (ten times the planned error bar)"
    blind.add_argument("--halfwidth", metavar="NUMBER", help=wide)
    blind.add_argument("--freeze", action="store_true", help="freeze settings and runs of the scope")
    blind.add_argument("--reveal", action="store_true", help="reveal a frozen scope; asks for its name")
    blind.add_argument("--by", metavar="NAME", help="who does it (your login name)")


def after_words(commands: Any) -> None:
    """Add the commands for a run that has ended."""
    told = "print the report of a run"
    report = add(commands, "report", "after:report", told, f"tercet report {RUN}")
    whole = "check every part of a run's archive"
    verify = add(commands, "verify", "after:verify", whole, f"tercet verify {RUN}")
    bag = "pack a finished run as a bag (RFC 8493) or a zip, or check a bag"
    pack = add(commands, "pack", "after:pack", bag, f"tercet pack {RUN} --zip")
    table = "write the visits of a run as CSV or NetCDF"
    export = add(commands, "export", "after:export", table, f"tercet export {RUN} visits.csv")
    said = "add a note to a run's log"
    note = add(commands, "note", "after:note", said, f"tercet note {RUN} 'door was open at 2'")
    verdict = "add your verdict on a run to its log"
    accept = add(commands, "accept", "after:accept", verdict, f"tercet accept {RUN} counts")
    for one in (report, verify, pack, export, note, accept):
        one.add_argument("run", type=Path, metavar="RUN", help="a run folder")
    pack.add_argument("--zip", action="store_true", help="one zip that Zarr opens, instead of a bag")
    pack.add_argument("--to", type=Path, metavar="TARGET", help="where to (beside the run)")
    address = "copy it there too, like s3://bucket/folder, and compare"
    pack.add_argument("--copy-to", metavar="ADDRESS", help=address)
    export.add_argument("file", type=Path, metavar="FILE", help="a file that ends in .csv or .nc")
    note.add_argument("text", metavar="TEXT", help="what you saw")
    accept.add_argument("verdict", choices=VERDICTS, help="whether this night counts")
    accept.add_argument("--remark", default="", help="why")
    for one in (pack, export):
        one.add_argument("--raw", action="store_true", help="give raw counts of a blinded run; it is logged")
    for one in (note, accept):
        one.add_argument("--by", metavar="NAME", help="who says so (your login name)")
