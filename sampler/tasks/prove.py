"""A search's certificate, made ready to stand beside its plan: rows named by the study's limits, inputs by their hashes."""

from __future__ import annotations

from typing import Any

import numpy as np

from sampler.tasks.certify import digest
from sampler.tasks.study import Study
from sampler.uncertainty.limits import Limits


def stated(certificate: dict[str, Any], study: Study, limits: Limits) -> dict[str, Any]:
    """The certificate with each row's study limit, term or place in the region, the inputs' hashes, and its own.

    `limits`: the rows of the problem that was searched, to which the certificate's row numbers refer.
    """
    rows = dict(certificate["rows"])
    index = np.asarray(rows.pop("limit"), np.int64)
    where, axis = limits.where_mm[index], limits.axis[index]
    rows |= {"source": limits.source[index], "where_mm": np.where(np.isnan(where), 0.0, where), "axis": axis,
             "term": [limits.label[row] if limits.axis[row] < 0 else "" for row in index]}
    whole = {**certificate, "rows": rows, "study": {"path": study.source.path, "sha256": study.source.sha256},
             "layout": {"path": study.layout_source.path, "sha256": study.layout_source.sha256}}
    return {**whole, "sha256": digest(whole)}
