"""The one table of verbs.

A verb is a module here of the same name: its docstring is its help (first line the summary, with one
example line that starts with `learnfilter`), and `run(settings)` does it and returns a summary.
Adding one takes a module, a line in VERBS, its settings in app/verb_settings.py and configs/<verb>.yaml.
"""

from __future__ import annotations

from learnfilter.app.config import Common
from learnfilter.app.verb_settings import (
    AblateConfig,
    DemoConfig,
    ExportConfig,
    LabelConfig,
    PlanConfig,
    RehearseConfig,
    ReplayConfig,
    SurveyConfig,
    TrainConfig,
    VerifyConfig,
)

VERBS: dict[str, type[Common]] = {
    "plan": PlanConfig,
    "survey": SurveyConfig,
    "rehearse": RehearseConfig,
    "label": LabelConfig,
    "train": TrainConfig,
    "ablate": AblateConfig,
    "export": ExportConfig,
    "verify": VerifyConfig,
    "replay": ReplayConfig,
    "demo": DemoConfig,
}
