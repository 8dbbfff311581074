"""The certificate: gates measured from a map and the scans alone, blind to how the map was made."""

from volmap.certify.comparison import Disagreement, compare, not_repeated, unlike
from volmap.certify.document import as_document, from_document, plain
from volmap.certify.evidence import Evidence
from volmap.certify.gates import certify
from volmap.certify.table import GateTable, Limit, read_gate_table

__all__ = [
    "Disagreement",
    "Evidence",
    "GateTable",
    "Limit",
    "as_document",
    "certify",
    "compare",
    "from_document",
    "not_repeated",
    "plain",
    "read_gate_table",
    "unlike",
]
