"""Every reader of what a stranger may send, with whole inputs to spoil and a way to read them."""

import contextlib
import hashlib
import json
import random
from collections.abc import Callable, Iterator
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

import labkit as lk
from labkit.engine.failure_tables import read_schedule
from labkit.engine.service_laws import parse_service
from labkit.fleet.readers import read_fleet
from labkit.plans.reading import _table as plan_table
from labkit.plans.schema import header_digest
from labkit.policies.naming import parse_policy
from labkit.records import frozen
from labkit.records.declared import Parameter, read_notebook
from labkit.records.frozen import MANIFEST, RUNS, TABLE
from labkit.records.store import Store
from labkit.studies.freezing import table_of
from labkit.studies.model import read_study
from labkit.studies.verifying import verify
from labkit.traces.estimate import fleet_from_trace
from labkit.traces.reading import open_trace
from tests.fuzz.mutants import Mutants
from tests.fuzz.odd_tables import odd_parquet
from tests.records.samples import record
from tests.records.tiny import write_notebook, write_tiny


class Reader:
    """Writes inputs into a folder of its own and reads them.

    Attributes
    ----------
    folder : Path
        Everything that a reader may find; nothing else is written by it.
    """

    seeds: tuple[bytes, ...] = ()
    tokens: tuple[bytes, ...] = ()

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def inputs(self, number: int) -> Iterator[bytes]:
        """Yield inputs without end."""
        self.source = Mutants(self.seeds, number, self.tokens)
        while True:
            yield self.source.draw()

    def read(self, content: bytes) -> None:
        """Read one input."""
        raise NotImplementedError

    def try_out(self, content: bytes) -> None:
        """Read one input, whatever comes of it."""
        with contextlib.suppress(lk.InputError):
            self.read(content)

    def file(self, name: str, content: bytes) -> Path:
        """Write a file of the input."""
        path = self.folder / name
        path.write_bytes(content)
        return path


class FleetCsv(Reader):
    """Two tables of text, parted by a line that no table has."""

    PART = b"\n==\n"
    seeds = tuple(
        b"\n==\n".join(pair)
        for pair in (
            (b"server,capacity\na,1\nb,2.5\nc,3e0\n", b"option_1,option_2,demand\na,b,1\nb,c,2\n"),
            (b"server\n0\n1\n2\n", b"option_1,option_2,option_3\n0,1,\n1,2,0\n"),
            (b'server,capacity\r\n"a,b",1\r\n"two\nlines",2\r\n', b'option_1,option_2\n"a,b","two\nlines"\n'),
        )
    )
    tokens = (b"server", b"capacity", b"option_1", b"option_3", b"demand", b"\n==\n", b"a", b"01", b"1_0")

    def read(self, content):
        servers, _, choices = content.partition(self.PART)
        self.file("servers.csv", servers)
        self.file("choices.csv", choices)
        read_fleet(self.folder)


class Parquet(Reader):
    """Half of the inputs are whole files of odd tables, half are spoilt files of good ones."""

    whole: pa.Table

    def inputs(self, number):
        draw = random.Random(number)
        good = [self._file(self.whole, how) for how in ("none", "zstd")]
        self.source = Mutants(good, number)
        while True:
            yield odd_parquet(draw, self.whole) if draw.random() < 0.5 else self.source.draw()

    @staticmethod
    def _file(table, compression):
        sink = pa.BufferOutputStream()
        pq.write_table(table, sink, compression=compression)
        return sink.getvalue().to_pybytes()


class ServersParquet(Parquet):
    whole = pa.table({"server": ["a", "b", "c"], "capacity": [1.0, 2.0, 3.0]})

    def __init__(self, folder):
        super().__init__(folder)
        self.file("choices.csv", b"option_1,option_2\na,b\nb,c\n")

    def read(self, content):
        self.file("servers.parquet", content)
        read_fleet(self.folder)


class ChoicesParquet(Parquet):
    whole = pa.table({"option_1": [0, 1, 2], "option_2": [1, 2, 0], "demand": [1.0, 2.0, 0.5]})

    def __init__(self, folder):
        super().__init__(folder)
        self.file("servers.csv", b"server\n0\n1\n2\n")

    def read(self, content):
        self.file("choices.parquet", content)
        read_fleet(self.folder)


FLEET = lk.Fleet(
    pd.DataFrame({"server": ["a", "b", "c"]}),
    pd.DataFrame({"option_1": ["a", "b"], "option_2": ["b", "c"]}),
)


def read_all(path, turn):
    """Read a trace in one of the two ways: with the servers of a fleet, or with those that it shows."""
    if turn % 2:
        for _ in open_trace(path, FLEET).blocks():
            pass
    else:
        fleet_from_trace(path, demand="work" if turn % 4 else "tasks")


class TraceCsv(Reader):
    seeds = (
        b"time,option_1,option_2,option_3,size,duration,placed\n"
        b"0,a,b,,1,2.5,a\n0,c,,,0,0,c\n1.5,b,,a,2,1e3,b\n4,c,b,a,3,7,a\n",
        b"time,option_1,option_2\n2031-05-02T08:30:00,a,b\n2031-05-02 08:31:00.5,b,c\n",
        b"time,option_1,option_2,duration\n2031-05-02T08:30:00Z,a,b,1\n2031-05-02T08:31:00+02:00,b,c,2\n",
    )
    tokens = (b"time", b"size", b"duration", b"placed", b"option_1", b"0001-01-01T00:00:00", b"1678-01-01")
    turn = 0

    def read(self, content):
        self.turn += 1
        read_all(self.file("trace.csv", content), self.turn)


class TraceParquet(Parquet):
    whole = pa.table(
        {
            "time": [0.0, 1.0, 1.5, 4.0],
            "option_1": ["a", "c", "b", "c"],
            "option_2": ["b", None, "a", "b"],
            "size": [1, 0, 2, 3],
            "duration": [2.5, 0.0, 1e3, 7.0],
            "placed": ["a", "c", "b", "b"],
        }
    )
    turn = 0

    def read(self, content):
        self.turn += 1
        read_all(self.file("trace.parquet", content), self.turn)


class FailuresCsv(Reader):
    seeds = (b"time,server,state\n0.5,a,down\n1,b,down\n2,a,up\n", b"state,server,time\ndown,1,0\nup,1,1e3\n")
    tokens = (b"time", b"server", b"state", b"up", b"down")

    def read(self, content):
        read_schedule(self.file("failures.csv", content))


class FailuresParquet(Parquet):
    whole = pa.table({"time": [0.5, 1.0, 2.0], "server": ["a", "b", "a"], "state": ["down", "down", "up"]})

    def read(self, content):
        read_schedule(self.file("failures.parquet", content))


class StudyFile(Reader):
    seeds = (
        b'title = "T"\nquestion = """\nWhy?\n"""\nnotebook = "tiny.ipynb"\nreplicates = 3\nentropy = 1\n'
        b"[parameters]\npolicies = [\"one-choice\"]\nmode = 'good'\n"
        b"[grid]\nshare = [0.5, 0.25]\ntasks = [3, 4]\n",
        b'notebook = "placed.ipynb"\nreplicates = 3\nentropy = 1\n[parameters]\nfleet = "data"\n[answer]\n'
        b'notebook = "answer.ipynb"\nrisk = 0.5\nmixes = []\n',
    )
    tokens = (
        *(b"title", b"grid", b"answer", b"precision = 0.1\n", b"most_replicates = 9\n", b"mixes", b"tasks"),
        *(
            b"[1, [2, {a = 3}]]",
            b"{a = 1}",
            b"1979-05-27T07:32:00",
            b"[[grid]]",
            b'"../.."',
            b'"/etc"',
            b"[]",
        ),
        *(
            b"study",
            b"store",
            b"output",
            b"workers",
            b"replicates",
            b'"\\u0000"',
            b'"~nobody/x"',
            b'"headroom"',
        ),
    )

    def __init__(self, folder):
        super().__init__(folder)
        write_tiny(folder / "tiny.ipynb")
        (folder / "data").mkdir()
        (folder / "data" / "servers.csv").write_text("server\n1\n2\n")
        answer = 'study: str = ""\nruns: list = []\nstore: str = ""\noutput: str = ""\nrisk: float = 0.1'
        write_notebook(folder / "answer.ipynb", "x = 1", parameters=answer)
        placed = "fleet: str = 'x'\nreplicates: int = 1\nentropy: int = 1"
        write_notebook(folder / "placed.ipynb", "x = 1", parameters=placed)

    def read(self, content):
        read_study(self.file("s.toml", content)).points  # noqa: B018


class NotebookFile(Reader):
    tokens = (
        *(
            b"cells",
            b"source",
            b"metadata",
            b"tags",
            b"parameters",
            b"cell_type",
            b"code",
            b"null",
            b"[]",
            b"{}",
        ),
        *(
            b'{"a": 1}',
            b"import os",
            b"\\ud800",
            b"\\u0000",
            b"x: int = 1",
            b"x: list = [",
            b"f(1)",
            b"lambda: 0",
        ),
        *(
            b"x: int = 1e999",
            b"\\n",
            b"x: str = b'a'",
            b"x: int | None = None",
            b"x: list = [{1}]",
            b"x: a.b = 1",
        ),
    )

    def __init__(self, folder):
        super().__init__(folder)
        path = write_tiny(folder / "notebook.ipynb")
        small = write_notebook(folder / "notebook.ipynb", "import helper", parameters="n: int = 1")
        self.seeds = (path.read_bytes(), small.read_bytes())
        (folder / "helper.py").write_text("import other")

    def read(self, content):
        read_notebook(self.file("notebook.ipynb", content)).digest  # noqa: B018


class FrozenFolder(Reader):
    """Manifests and tables; most manifests are given the digests that they ought to have."""

    tokens = (
        *(
            b"null",
            b"[]",
            b"{}",
            b"true",
            b"-1",
            b"0.5",
            b'"../x"',
            b'"a/b"',
            b'"gap"',
            b'"policy"',
            b'"run_id"',
        ),
        *(b"1e999", b'"--detach"', b'"x.ipynb"', b"NaN"),
    )

    def __init__(self, folder):
        super().__init__(folder)
        self.table = record()
        runs = pa.table(
            {
                "run_id": ["0123456789abcdef"] * 2,
                "policy": ["a"] * 2,
                "replicate": [0, 1],
                "tasks": [5, 5],
                "gap": [0.25, 0.5],
            }
        )
        query = {
            "study": "s", "moment": "last checkpoint", "labels": ["policy"], "parameters": [],
            "measures": ["gap"],
            "risk": None, "confidence": 0.95,
        }  # fmt: skip
        from labkit.records.schema import row_of_origin

        origin = row_of_origin(self.table) | {"git_hash": "a" * 40, "notebook": "tiny"}
        self.facts = {
            "name": "first", "title": "T", "question": "", "study": "s",
            "frozen": "2026-12-01T00:00:00+00:00",
            "git_hash": "a" * 40, "dirty": False, "note": "", "query": query, "runs": [{**origin, "rows": 2}],
            "rows": 1, "versions": {"labkit": "0"},
        }  # fmt: skip
        self.whole = runs
        table = pa.Table.from_pandas(table_of(runs, query), preserve_index=False)
        files = {RUNS: frozen.encode(runs), TABLE: frozen.encode(table), "table.csv": b"x\n"}
        self.place = frozen.write_frozen(folder / "frozen", files, self.facts)
        self.kept = {path.name: path.read_bytes() for path in self.place.iterdir()}
        self.tables = {RUNS: runs, TABLE: table}

    def inputs(self, number):
        draw = random.Random(number)
        self.source = Mutants([self.kept[MANIFEST]], number, self.tokens)
        tables = {name: Mutants([self.kept[name]], number) for name in (RUNS, TABLE)}
        while True:
            kind = draw.random()
            if kind < 0.8:
                yield b"m" + self.source.draw()
            else:
                name = draw.choice((RUNS, TABLE))
                content = odd_parquet(draw, self.tables[name]) if kind < 0.9 else tables[name].draw()
                yield name[:1].encode() + content

    def read(self, content):
        name = {b"m": MANIFEST, b"r": RUNS, b"t": TABLE}[content[:1]]
        content = content[1:]
        manifest = json.loads(self.kept[MANIFEST])
        if name == MANIFEST:
            try:
                manifest = json.loads(content)
                content = frozen.manifest_text(manifest).encode()
            except (ValueError, AttributeError, TypeError, RecursionError):
                pass  # read as it is
        else:
            manifest["files"][name] = hashlib.sha256(content).hexdigest()
            (self.place / name).write_bytes(content)
            content, name = frozen.manifest_text(manifest).encode(), MANIFEST
        (self.place / name).write_bytes(content)
        verify("first", folder=self.folder / "frozen")
        for each in (RUNS, TABLE):
            if manifest != json.loads(self.kept[MANIFEST]):
                (self.place / each).write_bytes(self.kept[each])


class RecordFile(Parquet):
    def __init__(self, folder):
        super().__init__(folder)
        self.whole = record()
        (folder / "s").mkdir()

    def read(self, content):
        digest = hashlib.sha256(content).hexdigest()[:32]
        path = self.file(f"s/0123456789abcdef-{digest}.parquet", content)
        try:
            Store(self.folder).read(path)
        finally:
            path.unlink()


class PlanFolder(Reader):
    """Headers and tables; most headers are given the digests that they ought to have."""

    tokens = (
        b"null",
        b"[]",
        b"{}",
        b"-1",
        b"0.5",
        b'"servers.csv"',
        b'"../x.csv"',
        b'"own"',
        b"number",
        b"kind",
    )
    NAMES = ("plan.json", "servers.csv", "choices.csv", "vectors.csv", "vectors_loads.csv")

    def __init__(self, folder):
        super().__init__(folder)
        self.place = lk.plan(FLEET, "least-loaded", decisions=5).write(folder / "plan")
        self.kept = {path.name: path.read_bytes() for path in self.place.iterdir()}

    def inputs(self, number):
        draw = random.Random(number)
        sources = [Mutants([self.kept[name]], number, self.tokens) for name in self.NAMES]
        while True:
            which = 0 if draw.random() < 0.04 else draw.randrange(1, len(self.NAMES))
            yield bytes([which]) + sources[which].draw()

    def read(self, content):
        name, content = self.NAMES[content[0]], content[1:]
        header = json.loads(self.kept["plan.json"])
        if name == "plan.json":
            try:
                header = json.loads(content)
                header["digest"] = header_digest(header)
                content = json.dumps(header).encode()
            except (ValueError, AttributeError, TypeError, RecursionError):
                pass  # read as it is
            (self.place / name).write_bytes(content)
        else:
            (self.place / name).write_bytes(content)
            header["files"][name]["sha256"] = hashlib.sha256(content).hexdigest()
            rows = max(0, content.count(b"\n") - 1)
            header["files"][name]["rows"] = rows
            header["digest"] = header_digest(header)
            (self.place / "plan.json").write_text(json.dumps(header))
        try:
            if name == "plan.json":
                lk.read_plan(self.place)
            else:  # a header takes a hundredth of a second, by the schema
                plan_table(self.place, name, header["files"][name])
        finally:
            (self.place / name).write_bytes(self.kept[name])


class NamesInWords(Reader):
    """Policies, service laws and values for parameters, as they stand in a study or on the command line."""

    seeds = (
        *(
            b"one-choice",
            b"mixed(beta=0.5)",
            b"least-loaded(ties=first)",
            b"smooth-feedback(gain=1.5, every=7)",
        ),
        *(b"tree-flow(strengths=equal, leftover=coin, every=7)", b"static-split", b"pairwise-averaging"),
        *(b"exponential", b"lognormal(cv=2)", b"pareto(tail=2.5)", b"constant", b"a, mixed(beta=0.5),b"),
    )
    tokens = (
        b"beta",
        b"gain",
        b"every",
        b"(",
        b")",
        b"=",
        b":",
        b"nan",
        b"1e400",
        b"0x10",
        b"1_000",
        b"self",
    )

    def read(self, content):
        text = content.decode("utf-8", "surrogateescape")
        kinds = [Parameter("x", kind, False, None) for kind in ("int", "float", "str", "bool", "list")]
        paths = [Parameter(name, "str", False, "") for name in ("fleet", "x_path", "x_folder")]
        for act in (parse_policy, parse_service, *(each.checked for each in (*kinds, *paths))):
            try:
                act(text)
            except lk.InputError:
                continue


READERS: dict[str, Callable[[Path], Reader]] = {
    "fleet.csv": FleetCsv,
    "servers.parquet": ServersParquet,
    "choices.parquet": ChoicesParquet,
    "trace.csv": TraceCsv,
    "trace.parquet": TraceParquet,
    "failures.csv": FailuresCsv,
    "failures.parquet": FailuresParquet,
    "study.toml": StudyFile,
    "notebook.ipynb": NotebookFile,
    "frozen": FrozenFolder,
    "record.parquet": RecordFile,
    "plan": PlanFolder,
    "words": NamesInWords,
}
