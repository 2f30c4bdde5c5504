"""The document as JSON: stable, strict, and read back without loss."""

from __future__ import annotations

import json

from robustrm.report.document import Document


def json_text(document: Document) -> str:
    """Return the document as JSON text with a newline at its end.

    Keys keep the order of the document, which does not depend on the data; NaN and infinite
    values are refused, since JSON has none (the document holds None).
    """
    return json.dumps(document, allow_nan=False, ensure_ascii=False, indent=2) + "\n"
