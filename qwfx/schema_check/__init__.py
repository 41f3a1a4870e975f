"""The outline of a file against the schemas of the format, with messages that a user can act on.

The structural check of FORMAT.md in two parts: plain JSON Schema 2020-12, which any implementation can run on the same
documents, and the shapes vocabulary (``dims`` and its companions), which ties extents of different datasets together.
"""

from __future__ import annotations

from qwfx.schema_check.check import check_outline
from qwfx.schema_check.documents import jastrow_forms, load_schema
from qwfx.schema_check.problems import SchemaProblem

__all__ = ["SchemaProblem", "check_outline", "jastrow_forms", "load_schema"]
