"""Spellcurve's validator: proves that the figures of the Spellcurve dbt package are right."""

from typing import TYPE_CHECKING, Any

from spellcurve.certificate import write_certificate
from spellcurve.compare import Comparison, Disagreement, compare_curves
from spellcurve.exact import CurveRow, Spell, group_spells, survival_curve, survival_curves
from spellcurve.provenance import Provenance, ProvenanceError, find_provenance, first_provenance
from spellcurve.qualification import Figure, Qualification, QualificationError, qualify

if TYPE_CHECKING:
    from spellcurve.check import CheckedCall, CheckError, CheckResult, check_project

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


def __getattr__(name: str) -> Any:
    """Load what needs lifelines and scipy when it is first asked for: that takes a second or two."""
    if name in ("CheckError", "CheckResult", "CheckedCall", "check_project"):
        from spellcurve import check

        return getattr(check, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
