import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.cli import main
from labkit.records.store import Store
from labkit.studies.freezing import freeze
from labkit.studies.model import read_study
from tests.records.tiny import write_tiny


class Project:
    """A folder with the tiny notebook, studies of it and a store, driven by the command line."""

    GRID = "share = [0.5, 0.25]\ntasks = [3, 4]"  # four runs

    def __init__(self, folder, capsys):
        self.folder, self.store, self.capsys = folder, folder / "runs", capsys
        self.notebook = write_tiny(folder / "tiny.ipynb")

    def study(self, name="s", extra="", grid="", answer="", replicates=3):
        path = self.folder / f"{name}.toml"
        path.write_text(
            f'notebook = "tiny.ipynb"\nreplicates = {replicates}\nentropy = 1\n'
            f"[parameters]\n{extra}\n[grid]\n{grid}\n{answer}"
        )
        return str(path)

    def record(self, path):
        """Record the points of a study without any kernel; return their ids."""
        study = read_study(path)
        runs = []
        for point in study.points:
            run = lk.begin_run(
                str(self.notebook), {**point.parameters, "study": study.name, "store": str(self.store)}
            )
            draws = np.random.default_rng(run.seed).random(run.parameters["replicates"])
            rows = {"replicate": range(len(draws)), "tasks": run.parameters["tasks"], "gap": draws + 0.5}
            run.record(pd.concat([pd.DataFrame({"policy": p, **rows}) for p in run.parameters["policies"]]))
            runs.append(run.id)
        return runs

    def __call__(self, *words, store=None):
        """Run a command; return its status and what it printed on both streams."""
        self.capsys.readouterr()
        status = main([*words, "--store", str(store or self.store)])
        out, err = self.capsys.readouterr()
        return status, out, err


@pytest.fixture
def project(tmp_path, capsys):
    return Project(tmp_path, capsys)


@pytest.fixture
def folder(project):
    return project.folder / "results" / "frozen"


@pytest.fixture
def frozen(project, folder):
    """Freeze a study with what its tests record; further keywords go to `freeze`."""

    def make(name="first", study=None, **options):
        path = study or project.study(grid=project.GRID, replicates=5)
        if not any(Store(project.store).files("s")):
            project.record(path)
        options = {"allow_changes": True, "output": project.folder / "answers", **options}
        return freeze(path, name, Store(project.store), folder=folder, **options)

    return make
