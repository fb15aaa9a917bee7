"""The stand-alone checker under one name: everything it offers, from the parts in ``synth.proof.checking``.

``synth.proof.joined.checker_text`` makes one file of the same parts, which needs nothing but Python's standard library
and is what a hand-off bundle ships as check.py.
"""

from __future__ import annotations

import sys

from synth.proof.checking.arithmetic import (
    apply,
    contraction,
    definite,
    exp_above,
    least,
    mul,
    plus,
    resolvent,
    root,
    rounded,
    solve,
    transpose,
)
from synth.proof.checking.claims import covers_of, sentences
from synth.proof.checking.description import read_model, read_system
from synth.proof.checking.evidence import Derived, Evidence, arriving, delays, read_evidence, read_point, verified
from synth.proof.checking.flow import Flow, absolute_integral, free_response, peak_gain
from synth.proof.checking.main import (
    _once,
    above,
    below,
    beside,
    check_document,
    check_text,
    compare,
    derive,
    main,
    wording,
)
from synth.proof.checking.peak_route import Gains, Measure, PeakOperator, peak_names, slim, unit_gains
from synth.proof.checking.reading import (
    CAUTIONS,
    FIELDS,
    LOOSE,
    MANY,
    MEANING,
    NORM,
    SCHEMA,
    VERSION,
    Matrix,
    Rejected,
    Row,
    canonical,
    digest,
    fields,
    items,
    matrix,
    need,
    number,
    optional,
    positive,
    shown,
    text,
)
from synth.proof.checking.storage_route import Storage
from synth.proof.checking.units import Line, Own, Plant, Unit, close, signals
from synth.proof.checking.wiring import Link, Station, System, Term

__all__ = [
    "CAUTIONS", "FIELDS", "LOOSE", "MANY", "MEANING", "NORM", "SCHEMA", "VERSION", "Derived", "Evidence", "Flow",
    "Gains", "Line", "Link", "Matrix", "Measure", "Own", "PeakOperator", "Plant", "Rejected", "Row", "Station",
    "Storage", "System", "Term", "Unit", "_once", "above", "absolute_integral", "apply", "arriving", "below", "beside",
    "canonical", "check_document", "check_text", "close", "compare", "contraction", "covers_of", "definite", "delays",
    "derive", "digest", "exp_above", "fields", "free_response", "items", "least", "main", "matrix", "mul", "need",
    "number", "optional", "peak_gain", "peak_names", "plus", "positive", "read_evidence", "read_model", "read_point",
    "read_system", "resolvent", "root", "rounded", "sentences", "shown", "signals", "slim", "solve", "text",
    "transpose", "unit_gains", "verified", "wording",
]  # fmt: skip

if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
