"""The table of dialects: a new one is one file and one line here.

Owns the names that a configuration may use.
"""

from typing import Final

from motekeep.wire import aa, bm, bm_climate, stuffed
from motekeep.wire.frame import Dialect

DIALECTS: Final[dict[str, Dialect]] = {
    dialect.name: dialect
    for dialect in (
        bm.DIALECT,
        bm_climate.DIALECT,
        aa.DIALECT,
        stuffed.DIALECT,
    )
}
