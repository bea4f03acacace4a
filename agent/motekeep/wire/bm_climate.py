"""Dialect `bm-climate`: `42 4D`, length 28 like `bm`, but four counts, then temperature and humidity. 9600 8N1.

Owns its layout. Its bytes alone do not tell it from `bm`: `guess` does, over many frames. Layout from memory, common
practice: six masses, counts above 0.3 0.5 1.0 2.5 um, temperature x10 (signed), humidity x10, revision and error.
"""

from typing import Final

from motekeep.wire.frame import Dialect, Layout
from motekeep.wire.framed import COMMANDS, COUNT_TOP, DECLARED_TOP, START, Form, FramedDecoder, encoder

BM_CLIMATE: Final = Layout(
    "bm-climate-28",
    ("pm1", "pm2_5", "pm10"),
    1.0,
    DECLARED_TOP,
    (0.3, 0.5, 1.0, 2.5),
    COUNT_TOP,
    ambient=True,
    climate=True,
)

FORMS: Final = (Form(BM_CLIMATE, "10HhHBB", climate_at=10),)


def decoder() -> FramedDecoder:
    return FramedDecoder(FORMS)


DIALECT: Final = Dialect(
    name="bm-climate",
    baud=9600,
    polled=False,
    layouts=(BM_CLIMATE,),
    decoder=decoder,
    encode=encoder(FORMS),
    commands=COMMANDS,
    start=START,
    warm_up_s=30.0,
    longest=32,
)
