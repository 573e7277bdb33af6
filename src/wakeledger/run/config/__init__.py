"""The survey file: one typed configuration, with every quantity in SI.

`read_survey` reads a file, `parse_survey` a text kept in an archive; both give a `Survey` or one `SurveyError`.
"""

from wakeledger.run.config.plane import Axes, Plane
from wakeledger.run.config.stream import ModelTable, ReferenceTable
from wakeledger.run.config.survey import Survey, parse_survey, read_survey
from wakeledger.run.config.tables import BoundaryTable, SectionTable, WakeTable
from wakeledger.run.config.uncertainty import Comparison, Source, UncertaintyTable

__all__ = [
    "Axes",
    "BoundaryTable",
    "Comparison",
    "ModelTable",
    "Plane",
    "ReferenceTable",
    "SectionTable",
    "Source",
    "Survey",
    "UncertaintyTable",
    "WakeTable",
    "parse_survey",
    "read_survey",
]
