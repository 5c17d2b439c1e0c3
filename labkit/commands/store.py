"""`labkit check` and `labkit compact`: looking after the store."""

import argparse

from labkit.commands.parts import Commands, print_json, say, store_of


def add(commands: Commands) -> None:
    """Add these commands to the parser."""
    check = commands.add(
        "check",
        _check,
        "Check every file of the store and say what to do about each that is damaged, doubled, foreign or "
        "left over; nothing is changed (labkit verify checks frozen tables).",
    )
    check.add_argument("study", metavar="STUDY", nargs="?", help="only the records of this study")

    compact = commands.add(
        "compact",
        _compact,
        "Move records from files of their own into larger files, where many are read fast; runs keep their "
        "ids, and it may be interrupted at any time.",
    )
    compact.add_argument("study", metavar="STUDY", nargs="?", help="only the records of this study")


def _check(arguments: argparse.Namespace) -> int:
    from labkit.records.store_check import check_store

    store = store_of(arguments)
    done = check_store(store, arguments.study)
    if arguments.json:
        faults = [
            {"kind": each.kind, "path": str(each.path), "sentence": each.sentence} for each in done.faults
        ]
        counts = {"runs": done.runs, "files": done.files, "packs": done.packs, "older_schema": done.older}
        print_json({"store": str(store.folder), **counts, "faults": faults})
        return 1 if done.faults else 0
    for fault in done.faults:
        print(f"{fault.kind}: {fault.sentence}")
    about = f"{_count(done.runs, 'run')} in {_count(done.files, 'file')} of {store.folder} were checked"
    if done.packs:
        about += f", {_count(done.packs, 'pack')} among them"
    if done.older:
        about += f"; {_count(done.older, 'record')} of an older schema, which is understood"
    print(f"{about}: {_count(len(done.faults), 'fault') if done.faults else 'all is well'}")
    return 1 if done.faults else 0


def _count(number: int, what: str) -> str:
    return f"{number:,} {what}{'' if number == 1 else 's'}"


def _compact(arguments: argparse.Namespace) -> int:
    from labkit.errors import InputError
    from labkit.records.compaction import Compaction, compact
    from labkit.records.project import check_study_name

    store = store_of(arguments)
    studies = [arguments.study] if arguments.study else store.studies()
    done = []
    for study in studies:
        try:
            check_study_name(study)
        except InputError as error:
            if arguments.study:
                raise
            result = Compaction(study, left=[f"folder {store.folder / study}: {error}"])
        else:
            result = compact(store, study)
        done.append(result)
        for sentence in result.left:
            say(f"left as it is: {sentence}")
        if not arguments.json:
            merged = f", and {_count(result.merged, 'pack')} merged" if result.merged else ""
            moved = f"{_count(result.runs, 'run')} moved into {_count(result.packs, 'pack')}"
            print(f"study {study}: {moved}{merged}")
    if arguments.json:
        print_json([vars(result) for result in done])
    elif not studies:
        print(f"no records in {store.folder}")
    return 1 if any(result.left for result in done) else 0
