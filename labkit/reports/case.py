"""What a headroom answer rests on, read again: the records, their fleet, the answer table and the verdict."""

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

from labkit.analysis.answer import Verdict, answer_table, judge
from labkit.records.store import Store
from labkit.studies.grouping import Group
from labkit.studies.model import Study
from labkit.studies.reading import read_study_records
from labkit.studies.subject import Subject, subject_of
from labkit.survey.facts import Survey, survey

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Case:
    """One answer of a study, as its answer notebook found it.

    Attributes
    ----------
    records : pandas.DataFrame
        All measured rows.
    subject : Subject
        What its runs have in common.
    asked : dict
        The checked parameters of the answer: risk, confidence, baseline, policy, max_headroom.
    table : pandas.DataFrame
        The table of `labkit.analysis.answer.answer_table`.
    verdict : Verdict
    """

    records: "pd.DataFrame"
    subject: Subject
    asked: dict[str, Any]
    table: "pd.DataFrame"
    verdict: Verdict

    @property
    def capacity(self) -> float:
        """Total capacity of the fleet, work units."""
        return self.subject.fleet.total_capacity

    @property
    def mean(self) -> float:
        """Mean utilisation at the end."""
        return float(self.table["mean_utilisation"].iloc[0])

    @cached_property
    def best(self) -> Survey:
        """The exact survey of the fleet."""
        return survey(self.subject.fleet)

    def at_risk(self, risk: float) -> "pd.DataFrame":
        """Return the answer table for another accepted risk."""
        return answer_table(
            self.records,
            risk=risk,
            confidence=self.asked["confidence"],
            baseline=self.asked["baseline"],
            total_capacity=self.capacity,
        )


def case_of(study: Study, group: Group, store: Store) -> Case:
    """Read the case of a study's answer by the notebook headroom_answer.

    Raises
    ------
    InputError
        When the records do not make one answer.
    """
    assert study.answer_notebook is not None
    asked = study.answer_notebook.checked(study.answer_parameters or {})
    runs = [point.run_id for point in group.points]
    records = read_study_records(study.name, runs=runs, store=store.folder)
    subject = subject_of(records)
    table = answer_table(
        records,
        risk=asked["risk"],
        confidence=asked["confidence"],
        baseline=asked["baseline"],
        total_capacity=subject.fleet.total_capacity,
    )
    return Case(records, subject, asked, table, judge(table, asked["policy"]))
