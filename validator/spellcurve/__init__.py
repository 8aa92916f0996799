"""Spellcurve's validator: proves that the figures of the Spellcurve dbt package are right."""

from spellcurve.certificate import write_certificate
from spellcurve.check import CheckedCall, CheckError, CheckResult, check_project
from spellcurve.compare import Comparison, Disagreement, compare_curves
from spellcurve.exact import CurveRow, Spell, group_spells, survival_curve, survival_curves
from spellcurve.provenance import Provenance, ProvenanceError, find_provenance, first_provenance
from spellcurve.qualification import Figure, Qualification, QualificationError, qualify

__version__ = "0.1.0"

__all__ = [
    "CheckError",
    "CheckResult",
    "CheckedCall",
    "Comparison",
    "CurveRow",
    "Disagreement",
    "Figure",
    "Provenance",
    "ProvenanceError",
    "Qualification",
    "QualificationError",
    "Spell",
    "__version__",
    "check_project",
    "compare_curves",
    "find_provenance",
    "first_provenance",
    "group_spells",
    "qualify",
    "survival_curve",
    "survival_curves",
    "write_certificate",
]
