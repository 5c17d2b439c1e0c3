"""The schema of the header: what it must accept and refuse."""

import copy
import json

import pytest

import labkit as lk
from labkit.plans.schema import FILE, VERSION, fault_of
from tests.plans.makers import RULES


@pytest.mark.parametrize("rule", RULES)
def test_every_plan_has_a_valid_header(rule, fleet):
    assert fault_of(lk.plan(fleet, rule, decisions=9).header) is None


def test_the_header_names_the_schema_and_its_version(plan):
    schema = json.loads(FILE.read_text(encoding="utf-8"))
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    assert plan.header["$schema"] == FILE.name
    assert plan.header["schema_version"] == VERSION == schema["properties"]["schema_version"]["const"]


BREAKS = {
    "no version": lambda h: h.pop("schema_version"),
    "another version": lambda h: h.update(schema_version=2),
    "true for a version": lambda h: h.update(schema_version=True),
    "another schema": lambda h: h.update({"$schema": "other.json"}),
    "something more": lambda h: h.update(extra=1),
    "no policy": lambda h: h.pop("policy"),
    "unknown rule": lambda h: h["policy"].update(rule="round-robin"),
    "parameters no object": lambda h: h["policy"].update(parameters=[1]),
    "least-loaded without ties": lambda h: h["policy"].update(rule="least-loaded", parameters={}),
    "unknown ties": lambda h: h["policy"].update(
        rule="least-loaded", parameters={"looks": True, "ties": "last"}
    ),
    "mixed beyond 1": lambda h: h["policy"].update(rule="mixed", parameters={"beta": 1.5}),
    "short digest": lambda h: h["fleet"].update(digest="abc"),
    "capital digest": lambda h: h.update(digest="A" * 64),
    "no servers": lambda h: h["fleet"].update(servers=0),
    "half a choice": lambda h: h["fleet"].update(choices=1.5),
    "one option": lambda h: h["fleet"].update(most_options=1),
    "unknown capacities": lambda h: h.update(capacities="some"),
    "refresh below -1": lambda h: h["refresh"].update(every_tasks=-2),
    "never refreshed": lambda h: h["refresh"].update(every_tasks=0),
    "refreshed for nothing": lambda h: h["policy"].update(rule="one-choice", parameters={}),
    "no word on ties": lambda h: h["decisions"].pop("ties"),
    "empty word": lambda h: h["decisions"].update(coin=""),
    "no shares": lambda h: h["files"].pop("shares.csv"),
    "no vectors": lambda h: h["files"].pop("vectors.csv"),
    "file elsewhere": lambda h: h["files"].update({"../a.csv": h["files"]["shifts.csv"]}),
    "rows below 0": lambda h: h["files"]["shifts.csv"].update(rows=-1),
    "file without digest": lambda h: h["files"]["shifts.csv"].pop("sha256"),
}


@pytest.mark.parametrize("spoil", BREAKS.values(), ids=BREAKS.keys())
def test_each_broken_header_is_refused(plan, spoil):
    header = copy.deepcopy(plan.header)
    spoil(header)
    fault = fault_of(header)
    assert fault
    assert "\n" not in fault


@pytest.mark.parametrize("header", [None, [], "plan", 1])
def test_what_is_no_object_is_refused(header):
    assert fault_of(header)
