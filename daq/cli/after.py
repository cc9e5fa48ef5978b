"""Commands after a run: report, verify, pack, export, note, accept."""

from __future__ import annotations

import argparse
from pathlib import Path

from daq.cli.answer import Answer
from daq.errors import DescriptionError, StorageError
from daq.report import lines
from daq.service.blind import refuse_hidden
from daq.service.figures import figures_of
from daq.service.morning import write_report
from daq.service.remarks import accept as accepted
from daq.service.remarks import note as noted
from daq.storage.copy import copy_to
from daq.storage.export import write_csv, write_netcdf
from daq.storage.pack import bag_problems, pack_bag, pack_zip
from daq.storage.verify import verify as verified


def report(arguments: argparse.Namespace) -> Answer:
    """Print the report of a run, from its archive alone."""
    figures = figures_of(arguments.run)
    files = write_report(arguments.run, figures)
    told = [*lines(figures), "", *(f"{kind:<8}{path}" for kind, path in files.items())]
    return Answer(StorageError.exit_status if figures["damaged"] else 0, figures | {"files": files}, told)


def verify(arguments: argparse.Namespace) -> Answer:
    """Check every part of a run against what was written, and say what is still good."""
    found = verified(arguments.run)
    figures = {"ok": found.ok, "visits": found.visits, "rows": found.rows, "problems": list(found.problems)}
    whole = f"{found.visits} of {found.rows} visits are whole"
    if found.ok:
        return Answer(0, figures, [f"{arguments.run}: {whole}; nothing is damaged."])
    told = [
        *(f"{one}." for one in found.problems),
        f"{whole}.",
        *(f"Still good: {one}." for one in found.good),
    ]
    return Answer(StorageError.exit_status, figures | {"good": list(found.good)}, told)


def pack(arguments: argparse.Namespace) -> Answer:
    """Pack a finished run as a bag, or as one zip that Zarr opens; the run itself is left as it is."""
    run: Path = arguments.run
    if run.name.endswith(".bag"):
        found = bag_problems(run)
        figures = {"ok": not found, "problems": found}
        told = [f"{one}." for one in found] or [f"{run}: the bag is whole."]
        return Answer(StorageError.exit_status if found else 0, figures, told)
    refuse_hidden(run, arguments.raw, "a packed run")
    target = arguments.to or run.with_name(run.name + (".zip" if arguments.zip else ".bag"))
    if arguments.zip:
        pack_zip(run, target)
    else:
        pack_bag(run, target, "\n".join([*lines(figures_of(run)), ""]))
    figures = {"ok": True, "packed": str(target)}
    if arguments.copy_to is None:
        return Answer(0, figures, [f"packed as {target}"])
    copied = copy_to(target, arguments.copy_to)
    sent = f"{copied} files copied to {arguments.copy_to}, each read back and compared"
    return Answer(0, figures | {"copied": copied}, [f"packed as {target}", sent])


def export(arguments: argparse.Namespace) -> Answer:
    """Export the visits of a run as CSV or NetCDF, by the ending of the file."""
    writers = {".csv": write_csv, ".nc": write_netcdf}
    writer = writers.get(arguments.file.suffix)
    if writer is None:
        raise DescriptionError(
            (f"{arguments.file}: end the name in .csv or .nc, so that the format is known.",)
        )
    if not arguments.file.parent.is_dir():
        raise DescriptionError((f"{arguments.file.parent}: there is no such folder. Make it first.",))
    refuse_hidden(arguments.run, arguments.raw, "an export")
    writer(arguments.run, arguments.file)
    return Answer(0, {"ok": True, "file": str(arguments.file)}, [f"written to {arguments.file}"])


def note(arguments: argparse.Namespace) -> Answer:
    """Add a note to the log of a run."""
    entry = noted(arguments.run, arguments.text, arguments.by)
    return Answer(0, entry, [f"noted at {entry['utc']} by {entry['by']}"])


def accept(arguments: argparse.Namespace) -> Answer:
    """Add a person's verdict on a run to its log."""
    entry = accepted(arguments.run, arguments.verdict, arguments.by, arguments.remark)
    return Answer(0, entry, [f"{entry['by']}: this night {entry['verdict']} (digest {entry['digest'][:12]})"])
