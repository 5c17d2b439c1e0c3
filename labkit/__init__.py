"""How much headroom a fleet needs when its work can go only to a few places each."""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

# Public name -> module that defines it. Nothing heavy is imported before a name is used.
_HOMES = {
    "InputError": "labkit.errors",
    "StoreError": "labkit.errors",
    "NotStationary": "labkit.errors",
    "HeadroomExceeded": "labkit.errors",
    "TooFewReplicates": "labkit.errors",
    "Fleet": "labkit.fleet.model",
    "read_fleet": "labkit.fleet.readers",
    "fleet_from_graph": "labkit.fleet.graphs",
    "fleet_from_trace": "labkit.traces.estimate",
    "ring": "labkit.fleet.families",
    "torus": "labkit.fleet.families",
    "hypercube": "labkit.fleet.families",
    "ladder": "labkit.fleet.families",
    "complete": "labkit.fleet.families",
    "random_regular": "labkit.fleet.families",
    "ring_with_chords": "labkit.fleet.families",
    "fleet_of_family": "labkit.fleet.named",
    "survey": "labkit.survey.facts",
    "stability_limit": "labkit.survey.stability",
    "Survey": "labkit.survey.facts",
    "outages": "labkit.survey.outages",
    "advise_links": "labkit.survey.links",
    "add_links": "labkit.survey.links",
    "OneChoice": "labkit.policies.one_choice",
    "LeastLoaded": "labkit.policies.least_loaded",
    "Mixed": "labkit.policies.mixed",
    "StaticSplit": "labkit.policies.static_split",
    "SmoothFeedback": "labkit.policies.smooth_feedback",
    "PairwiseAveraging": "labkit.policies.pairwise_averaging",
    "TreeFlow": "labkit.policies.tree_flow",
    "policy": "labkit.policies.own_rule",
    "check_policy": "labkit.trials.checking",
    "PolicyCheck": "labkit.trials.report",
    "Fresh": "labkit.engine.information",
    "Snapshot": "labkit.engine.information",
    "Dispatchers": "labkit.engine.information",
    "Exponential": "labkit.engine.service_laws",
    "Deterministic": "labkit.engine.service_laws",
    "Lognormal": "labkit.engine.service_laws",
    "Hyperexponential": "labkit.engine.service_laws",
    "BoundedPareto": "labkit.engine.service_laws",
    "Empirical": "labkit.engine.service_laws",
    "Failures": "labkit.engine.failures",
    "RandomFailures": "labkit.engine.failures",
    "place": "labkit.placing",
    "serve_headroom": "labkit.provisioning",
    "replay_headroom": "labkit.provisioning",
    "Provision": "labkit.provisioning",
    "service_limits": "labkit.analysis.service_limits",
    "serve": "labkit.serving",
    "replay": "labkit.replaying",
    "ServiceOutcome": "labkit.engine.service_measures",
    "forecast": "labkit.stationary.forecast",
    "stationary_gap": "labkit.stationary.chains",
    "long_run": "labkit.stationary.long_run",
    "Forecast": "labkit.stationary.forecast",
    "Outcome": "labkit.engine.placement",
    "plan": "labkit.plans.export",
    "Plan": "labkit.plans.model",
    "read_plan": "labkit.plans.reading",
    "headroom": "labkit.analysis.headroom",
    "block_bootstrap": "labkit.analysis.block_bootstrap",
    "replicates_needed": "labkit.analysis.headroom",
    "compare": "labkit.analysis.comparison",
    "replicate_until": "labkit.analysis.precision",
    "size_study": "labkit.analysis.sizing",
    "StudySize": "labkit.analysis.sizing",
    "fit_growth": "labkit.figures.growth",
    "GrowthFit": "labkit.figures.growth",
    "save_figure": "labkit.figures.saving",
    "register_law": "labkit.analysis.growth_laws",
    "explore": "labkit.explorer.explorer",
    "Explorer": "labkit.explorer.explorer",
    "use_scheduler": "labkit.sharing.scheduler",
    "begin_run": "labkit.records.run",
    "begin_answer": "labkit.studies.subject",
    "write_study": "labkit.studies.own_rules",
    "WrittenStudy": "labkit.studies.own_rules",
    "read_study_records": "labkit.studies.reading",
    "read_frozen": "labkit.records.frozen",
    "write_report": "labkit.reports.report",
}

__all__ = [*_HOMES, "__version__"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'labkit' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
