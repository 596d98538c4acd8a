"""Print published values, what is found here, and the digits of agreement: python -m tests.published."""

from __future__ import annotations

import sys

from tests.published.calibration_values import calibration_agreements
from tests.published.progress_curves import progress_agreements
from tests.published.published_laws import law_agreements
from tests.published.published_values import agreements


def main() -> int:
    """Print the table; 0 where all values agree on the digits that they carry."""
    rows = [*agreements(), *law_agreements(), *progress_agreements(), *calibration_agreements()]
    print(f"{'data':<27}{'quantity':<28}{'published':>14}{'found here':>14}{'digits':>8}{'needed':>8}")
    source = ""
    for row in rows:
        if row.source != source:
            source = row.source
            print(f"-- {source}")
        mark = "" if row.agrees else "  <- too few"
        print(
            f"{row.dataset:<27}{row.quantity:<28}{row.published:>14.8g}{row.found:>14.8g}"
            f"{row.digits:>8.1f}{row.needed:>8.1f}{mark}"
        )
    failed = sum(not row.agrees for row in rows)
    print(f"{len(rows)} values, {failed} with too few digits")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
