"""The whole job in one command: `screen` a brief."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from homog import __version__
from homog.cli.options import Cluster, Processes, app
from homog.terminal import kept, progress, teller

if TYPE_CHECKING:
    from pandas import DataFrame

    from homog.brief import Brief


@app.command()
def screen(
    brief: Annotated[Path, typer.Argument(metavar="BRIEF", help="The requirement, a TOML file.")],
    out: Annotated[Path, typer.Option("--out", metavar="FOLDER", help="New folder for tables, figures and summary.")],
    resume: Annotated[bool, typer.Option("--resume", help="Go on with a run into FOLDER that has stopped.")] = False,
    csv: Annotated[bool, typer.Option("--csv", help="Write candidates.csv whatever its size.")] = False,
    solids: Annotated[bool, typer.Option(help="Look at the best again as solids, and rank by what they say.")] = True,
    workers: Processes = 0,
    cluster: Cluster = "",
) -> int:
    """Screen a brief: every candidate evaluated, the ones that meet it ranked, drawn and summed up.

    Writes the candidates as Parquet parts below candidates/ (up to 100,000 also as candidates.csv), shortlist.csv, a
    polar plot per shortlisted cell, a property chart, summary.md and a copy of the brief. FOLDER appears when all is
    there; until then the run grows in FOLDER.partial, and --resume goes on with it after a stop of any kind.

    Twice as many as are kept, 60 at most, are looked at again as solids of their true section where they are planar
    walls and the extra `solid` is installed; the shortlist is ranked by the result and shows both numbers.

    Exit status 3 if nothing meets the brief: the summary then says what is in the way.
    """
    from homog.brief import read_brief
    from homog.engine import Plan, started
    from homog.files import whole_folder
    from homog.recheck import MOST, missing_extra, second_look
    from homog.report import write_screening
    from homog.screening import run_screen
    from homog.store import Folder, has_parts

    asked = read_brief(brief)
    with whole_folder(out, resume=resume, worth=has_parts) as place:
        parts = Folder(place, Plan(asked).about())
        unlooked = "it was not asked for" if not solids else missing_extra() if asked.model != "solid" else ""

        def second(best: DataFrame, asked: Brief) -> DataFrame:
            with progress(min(len(best), MOST), "solids") as advance:
                return second_look(best, asked, workers=workers, progress=advance)

        looks = None if unlooked or asked.model == "solid" else second
        with (
            kept(place),
            started(workers, cluster, parts=parts.missing()) as using,
            progress(asked.count, "screening", parts=parts, computing=using.words) as advance,
        ):
            found = run_screen(asked, parts=parts, using=using, progress=advance, second=looks)
        with kept(place):
            write_screening(found, place, version=__version__, brief_name=brief.name, csv=csv, progress=teller(),
                            unlooked=unlooked)  # fmt: skip
    if len(found.shortlist):
        best = found.shortlist.iloc[0]
        print(f"{found.met:,} of {asked.count:,} candidates meet the brief; "
              f"first: {best['family']} (candidate {best['candidate']}).")  # fmt: skip
    elif found.met:
        print(f"{found.met:,} of {asked.count:,} candidates meet the brief by the screen's model, none of the best as "
              "a solid.")  # fmt: skip
    else:
        worst = max(found.falls, key=lambda fall: fall.missed, default=None)
        rejected = found.tally.total("reject") == asked.count
        why = (
            "every one is rejected" if rejected or not worst or not worst.missed else f"most miss: {worst.limit.words}"
        )
        print(f"nothing of {asked.count:,} candidates meets the brief; {why}.")
    print(f"Results: {out / 'summary.md'}")
    return 0 if len(found.shortlist) else 3
