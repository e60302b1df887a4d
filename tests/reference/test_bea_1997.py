"""BEA depreciation rates: Survey of Current Business, July 1997, table 3 (seen).

The published rate is the declining-balance rate over the life, to four decimals, wherever all three
are printed.
"""

import csv
from decimal import ROUND_HALF_UP, Decimal

from keelbook.locate import folder


def test_published_rate_is_declining_balance_rate_over_life():
    with (folder("rules") / "bea_1997.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    complete = [row for row in rows if row["rate"] and row["life"] and row["declining_balance_rate"]]
    assert len(complete) == 32
    four_decimals = Decimal("0.0001")
    off = [
        row["asset"]
        for row in complete
        # Half up, as printed: 1.65 / 8 = .20625 stands as .2063.
        if (Decimal(row["declining_balance_rate"]) / Decimal(row["life"])).quantize(
            four_decimals, ROUND_HALF_UP
        )
        != Decimal(row["rate"])
    ]
    assert off == []
