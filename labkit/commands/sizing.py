"""`labkit size`."""

import argparse

from labkit.commands.parts import Commands, number, print_json, say, whole


def add(commands: Commands) -> None:
    """Add this command to the parser."""
    size = commands.add(
        "size",
        _size,
        "Say how many replicates and which sizes reach a precision within a time; records nothing.",
    )
    size.add_argument("study", metavar="STUDY", help="a study of experiments/, or the path of a TOML file")
    size.add_argument(
        "--precision",
        metavar="P",
        type=number,
        help="half-width ÷ mean of each mean (as in the study, or 0.05)",
    )
    size.add_argument(
        "--minutes", metavar="M", type=number, default=10.0, help="that running the study may take (10)"
    )
    size.add_argument(
        "--pilot", metavar="N", type=whole, default=20, help="replicates a point of the first look (20)"
    )
    size.add_argument(
        "--measure", metavar="NAME", help="column of the records (the notebook's precision_of, or gap)"
    )
    size.add_argument("--jobs", metavar="N", type=whole, help="kernels at the same time (one a core)")
    size.add_argument(
        "--x", metavar="NAME", help="grid parameter that is the size (servers, if there is one)"
    )


def _size(arguments: argparse.Namespace) -> int:
    from labkit.analysis.sizing_words import as_json, sentences, table_text
    from labkit.studies.model import read_study
    from labkit.studies.piloting import PilotFailed
    from labkit.studies.sizing import size_of

    study = read_study(arguments.study)
    try:
        found = size_of(
            study,
            precision=arguments.precision,
            minutes=arguments.minutes,
            pilot=arguments.pilot,
            measure=arguments.measure,
            jobs=arguments.jobs,
            x=arguments.x,
            say=say,
        )
    except PilotFailed as error:
        say(str(error))
        return 1
    told = sentences(found.size)
    if arguments.json:
        print_json({"study": study.name, **as_json(found.size), "sentences": told, "lines": found.lines})
        return 0
    print(table_text(found.size, found.labels))
    print()
    print(" ".join(told))
    print(f"For the top of the study file, to know each mean {found.measure} to {found.precision:g}:")
    print()
    print("\n".join(found.lines))
    return 0
