"""Before any training: where on a site the robot cannot tell itself apart, and what would help."""

from learnfilter.survey.evidence import Evidence, RingComparison
from learnfilter.survey.groups import Group
from learnfilter.survey.lookalike import Survey, survey_site
from learnfilter.survey.markers import Marker, advise, contrasting, paint

__all__ = [
    "Evidence",
    "Group",
    "Marker",
    "RingComparison",
    "Survey",
    "advise",
    "contrasting",
    "paint",
    "survey_site",
]
