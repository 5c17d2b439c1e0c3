"""`labkit report`."""

import argparse

from labkit.commands.parts import Commands, print_json, say, store_of


def add(commands: Commands) -> None:
    """Add this command to the parser."""
    report = commands.add(
        "report",
        _report,
        "Make one page of a study for a design review: the decision first, then all behind it.",
    )
    report.add_argument("study", metavar="STUDY", help="a study of experiments/, or the path of a TOML file")
    report.add_argument(
        "--to", metavar="PATH", help="file that ends in .html, or a folder (results/reports/STUDY.html)"
    )
    report.add_argument(
        "--pdf", action="store_true", help="print it to a PDF beside it, too; needs chromium on the PATH"
    )
    report.add_argument("--replace", action="store_true", help="write over a report that is there")
    report.add_argument("--output", metavar="DIR", help="folder of the answers (results/answers)")


def _report(arguments: argparse.Namespace) -> int:
    from labkit.reports.report import write_report

    report = write_report(
        arguments.study,
        store=store_of(arguments),
        to=arguments.to,
        replace=arguments.replace,
        pdf=arguments.pdf,
        output=arguments.output,
        say=say,
    )
    if report.warning:
        say(report.warning)
    if arguments.json:
        print_json(vars(report))
    else:
        for name, path in (("report:", report.page), ("pdf:", report.pdf)):
            if path is not None:
                print(f"{name:<7} {path} ({path.stat().st_size / 1000:,.0f} kB)")
    return 1 if report.warning else 0
