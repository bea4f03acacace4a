"""A calibration document is either whole and possible, or refused with the path of what is wrong."""

import re
from hashlib import sha256

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from intervals import COINCIDENCE, EXAMPLE, GROWTH, LINEAR, MARCH, document
from motekeep.errors import DocumentError
from motekeep.measure.covariance import positive_semi_definite
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse
from motekeep.measure.steps.humidity_growth import HumidityGrowth
from motekeep.wire.aa import AA, AaDecoder, encode
from motekeep.wire.frame import Frame


def refusal(text: str | bytes) -> DocumentError:
    with pytest.raises(DocumentError) as refused:
        parse(text if isinstance(text, bytes) else text.encode())
    message = str(refused.value)
    assert "\n" not in message
    assert len(message) < 500
    return refused.value


def test_the_example_of_the_documentation_is_a_good_document() -> None:
    made = parse(EXAMPLE.encode())
    assert (made.issue, made.site, made.gateway, made.sensor) == (7, "quarry", "east-gate", "north")
    assert [s.name for s in made.steps] == ["humidity-growth", "linear"]
    assert made.steps[0].step == HumidityGrowth(0.35)
    assert made.covariance[1][2] == made.covariance[2][1] == -0.004
    assert made.covariance[1][1] == pytest.approx(0.03**2)
    assert made.residual["pm2_5"].at(10.0) == pytest.approx((0.8**2 + 0.5**2) ** 0.5)
    assert made.basis is not None
    assert made.basis.metrics["r2"] == 0.91


def test_the_digest_is_that_of_the_exact_bytes() -> None:
    text = EXAMPLE.encode()
    assert parse(text).digest == "sha256:" + sha256(text).hexdigest()
    assert parse(text + b"\n").digest != parse(text).digest


# Each one edit of the example, what must be blamed, and a word of the reason.
EDITS = [
    ("issue = 7", "", "issue", "missing"),
    ("issue = 7", "issue = 0", "issue", "is 0"),
    ("issue = 7", "issue = true", "issue", "is True"),
    ("issue = 7", "issue = 7.0", "issue", "is 7.0"),
    ("issue = 7", "isue = 7\nissue = 7", "isue", "did you mean issue?"),
    ('site = "quarry"', 'site = ""', "site", "1 to 200"),
    ('site = "quarry"', 'site = "a\\nb"', "site", "one line"),
    ("made_at = 2026-11-20T10:00:00Z", "made_at = 2026-11-20T10:00:00", "made_at", "zone"),
    ("made_at = 2026-11-20T10:00:00Z", 'made_at = "2026-11-20T10:00:00Z"', "made_at", "zone"),
    ("made_at = 2026-11-20T10:00:00Z", "made_at = 2027-11-20T10:00:00Z", "valid_until", "not after made_at"),
    ("made_at = 2026-11-20T10:00:00Z", "made_at = 1970-01-01T00:00:00Z", "made_at", "2020"),
    ("valid_until = 2027-11-20T00:00:00Z", "valid_until = 2026-11-20T12:00:00Z", "valid_until", "not after valid_from"),
    ("valid_until = 2027-11-20T00:00:00Z", "valid_until = 9999-12-31T23:59:59-14:00", "valid_until", "2199"),
    ("fits_revision = 151", "fits_revision = 65536", "fits_revision", "65536"),
    ("fits_revision = 151", "fits_revision = -1", "fits_revision", "-1"),
    ('kind = "humidity-growth"', 'kind = "humidty-growth"', "step[0].kind", "not known"),
    ("kappa = { value = 0.35, u = 0.05 }", "", "step[0].kappa", "missing"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = 0.35", "step[0].kappa", "no uncertainty"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = 0.35 }", "step[0].kappa.u", "missing"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = nan, u = 0.05 }", "step[0].kappa.value", "not finite"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = 0.35, u = inf }", "step[0].kappa.u", "not finite"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = 1e308, u = 0.05 }", "step[0].kappa.value", "physically"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = -0.1, u = 0.05 }", "step[0].kappa.value", "physically"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = 0.35, u = -0.05 }", "step[0].kappa.u", "physically"),
    ("kappa = { value = 0.35, u = 0.05 }", 'kappa = { value = "0.35", u = 0 }', "step[0].kappa.value", "'0.35'"),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = 1, u = 0, k = 2 }", "step[0].kappa.k", "not known"),
    (
        "kappa = { value = 0.35, u = 0.05 }",
        "kappa = { value = 0.35, u = 0.05 }\nrh_hihg = 80.0",
        "step[0].rh_hihg",
        "did you mean rh_high?",
    ),
    ("kappa = { value = 0.35, u = 0.05 }", "kappa = { value = 0, u = 0 }\nrh_low = 86", "step[0].rh_high", "not above"),
    ("slope = { value = 0.92, u = 0.03 }", "slope = { value = 0, u = 0.03 }", "step[1].slope.value", "physically"),
    (
        "slope = { value = 0.92, u = 0.03 }",
        "slope = { value = 0x" + "f" * 400 + ", u = 0 }",
        "step[1].slope.value",
        "1600 bits",
    ),
    ('channels = ["pm2_5"]', 'channels = ["pm10"]', "step[1].channels[0]", "no channel of [residual]"),
    ('channels = ["pm2_5"]', 'channels = ["pm2_5", "pm2_5"]', "step[1].channels[1]", "twice"),
    ('channels = ["pm2_5"]', "channels = []", "step[1].channels", "list of 0"),
    ('channels = ["pm2_5"]', 'name = "humidity-growth"', "step[1].name", "taken"),
    ('of = ["linear.slope", "linear.offset"]', 'of = ["linear.slope"]', "covariance[0].of", "not a pair"),
    ('of = ["linear.slope", "linear.offset"]', 'of = ["linear.slope", "linear.slope"]', "covariance[0].of", "pair"),
    (
        'of = ["linear.slope", "linear.offset"]',
        'of = ["slope", "linear.offset"]',
        "covariance[0].of[0]",
        "no parameter",
    ),
    ("value = -0.004", "value = -0.0061", "covariance[0].value", "larger than the product"),
    ("value = -0.004", "value = inf", "covariance[0].value", "not finite"),
    (
        "value = -0.004",
        'value = -0.004\n[[covariance]]\nof = ["linear.offset", "linear.slope"]\nvalue = 0',
        "covariance[1].of",
        "before",
    ),
    ("rh = [20.0, 85.0]", "", "range.rh", "missing"),
    ("rh = [20.0, 85.0]", "rh = [85.0, 20.0]", "range.rh", "not a range"),
    ("rh = [20.0, 85.0]", "rh = [20.0]", "range.rh", "not a range"),
    ("rh = [20.0, 85.0]", "rh = [20.0, 185.0]", "range.rh[1]", "physically"),
    ("pm2_5 = [0.0, 150.0]", "", "range.pm2_5", "missing"),
    ("pm2_5 = { u = 0.8, relative = 0.05 }", "", "residual", "no mass channel"),
    ("pm2_5 = { u = 0.8, relative = 0.05 }", "pm2_5 = { u = 0 }", "residual.pm2_5", "nothing over"),
    ("pm2_5 = { u = 0.8, relative = 0.05 }", "pm2_5 = { u = 1 }\npm3 = { u = 1 }", "residual.pm3", "did you mean pm"),
    ("u_rh = 3.0", "u_rh = 100.0", "climate.u_rh", "physically"),
    ("u_rh = 3.0", "rh_u = 3.0", "climate.rh_u", "not known"),
    ("hours = 1340", "hours = -1", "basis.hours", "physically"),
    ("metrics = { r2 = 0.91, rmse = 1.4 }", 'metrics = { r2 = "good" }', "basis.metrics.r2", "'good'"),
    ("[basis]", "[basis", "<text>", "TOML"),
    ("[basis]", "[step]", "<text>", "TOML"),
]


@pytest.mark.parametrize(("old", "new", "path", "word"), EDITS, ids=[f"{i}-{e[2]}" for i, e in enumerate(EDITS)])
def test_each_fault_is_refused_in_one_line_with_the_path_of_its_key(old: str, new: str, path: str, word: str) -> None:
    assert EXAMPLE.count(old) >= 1
    refused = refusal(EXAMPLE.replace(old, new, 1))
    assert refused.path == path
    assert word in str(refused)
    assert path in str(refused)
    assert refused.mend


def test_a_residual_for_a_channel_that_no_step_corrects_is_refused() -> None:
    line = LINEAR.replace('kind = "linear"', 'kind = "linear"\nchannels = ["pm2_5"]')
    refused = refusal(document(line, residual="pm2_5 = { u = 1 }\npm10 = { u = 1 }"))
    assert refused.path == "residual.pm10"


def test_parameters_of_two_steps_may_be_tied() -> None:
    tie = '[[covariance]]\nof = ["humidity-growth.kappa", "linear.slope"]\nvalue = 0.0012\n'
    made = parse(document(GROWTH + LINEAR, more=tie))
    assert made.covariance[0][1] == 0.0012


def test_pairs_that_are_possible_one_by_one_and_impossible_together_are_refused() -> None:
    """Three correlations of -0.9 each: the sum of the three would have a negative variance."""
    warm = LINEAR + "t_term = { value = 0.1, u = 0.1 }\n"
    pairs = (("slope", "offset", 0.04 * 0.3), ("slope", "t_term", 0.04 * 0.1), ("offset", "t_term", 0.3 * 0.1))

    def ties(r: float) -> str:
        return "".join(
            f'[[covariance]]\nof = ["linear.{a}", "linear.{b}"]\nvalue = {r * product}\n' for a, b, product in pairs
        )

    assert parse(document(warm, more=ties(-0.49))).covariance[0][1] == pytest.approx(-0.49 * 0.012)
    refused = refusal(document(warm, more=ties(-0.9)))
    assert refused.path == "covariance"
    assert "positive semi-definite" in str(refused)


# Squares of less than 1e-300 are subnormal: they have lost their digits, and are no covariance of anything any more.
NUMBER = st.floats(-1.0, 1.0).map(lambda x: x if abs(x) > 1e-140 else 0.0)


@settings(max_examples=50, deadline=None)
@given(st.lists(st.lists(NUMBER, min_size=4, max_size=4), min_size=1, max_size=4))
@example([[0.0, 0.0, 1.0, 1e-139]])
def test_whatever_random_numbers_have_as_covariance_is_accepted(factors: list[list[float]]) -> None:
    gram = [[sum(f[i] * f[j] for f in factors) for j in range(4)] for i in range(4)]
    assert positive_semi_definite(gram)


@settings(max_examples=50, deadline=None)
@given(st.floats(0.01, 1e6), st.floats(1.01, 100.0), st.integers(0, 2))
def test_a_negative_direction_is_found_whatever_the_units(unit: float, excess: float, place: int) -> None:
    matrix = [[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, unit * unit]]
    other = (place + 1) % 3
    size = (matrix[place][place] * matrix[other][other]) ** 0.5
    matrix[place][other] = matrix[other][place] = size * excess
    assert not positive_semi_definite(matrix)


# -- what must cost nothing --------------------------------------------------------------------


def test_a_document_over_its_size_is_refused_unread() -> None:
    refused = refusal(EXAMPLE.encode() + b"#" * 65536)
    assert "65536 are possible" in str(refused)


@pytest.mark.parametrize(
    "text",
    [
        "[" * 60000,
        "a = " + "[" * 400 + "]" * 400,
        "a = " + "[\n" * 20000,
        "a = " + "{a = " * 80 + "1" + "}" * 80,
        "a." * 30000 + "a = 1",
        "\n".join("a." * 240 + f"b{i} = 1" for i in range(100)),
        "[" + "a." * 200 + "a]",
        "issue = " + "9" * 5000,
        "issue = 1\n\x00",
        '"' * 60000,
    ],
    ids=range(10),
)
def test_rubbish_that_would_cost_a_parser_dear_is_refused_as_a_whole(text: str) -> None:
    assert refusal(text).path == "<text>"


def test_bytes_that_are_no_text_are_refused() -> None:
    assert "UTF-8 at byte 4" in str(refusal(b"a = \xff"))


@settings(max_examples=50, deadline=None)
@given(st.binary(max_size=300))
def test_any_bytes_are_a_document_or_a_named_refusal(data: bytes) -> None:
    with pytest.raises(DocumentError):
        parse(data)


@settings(max_examples=120, deadline=None)
@given(st.data())
def test_any_edit_of_a_good_document_is_a_document_or_a_named_refusal(data: st.DataObject) -> None:
    text = (EXAMPLE + COINCIDENCE).encode()
    start = data.draw(st.integers(0, len(text)))
    cut = text[:start] + data.draw(st.binary(max_size=4)) + text[start + data.draw(st.integers(0, 12)) :]
    try:
        assert isinstance(parse(cut), CalibrationDocument)
    except DocumentError as refused:
        assert re.fullmatch(r"[^\n]+", str(refused))  # noqa: PT017 (either outcome is right)


# -- whom and when it is for --------------------------------------------------------------------


def test_it_says_whom_it_is_for() -> None:
    made = parse(EXAMPLE.encode())
    assert made.covers("quarry", "east-gate", "north")
    assert made.not_for("quarry", "east-gate", "south") == "it is for sensor 'north', not 'south'"
    assert made.not_for("harbour", "east-gate", "north") == "it is for site 'quarry', not 'harbour'"
    assert not made.covers("quarry", "west-gate", "north")


def test_the_identity_of_two_bytes_that_a_dialect_has_in_place_of_a_revision_fits() -> None:
    [frame] = AaDecoder().feed(encode(Frame(AA, (8.0, 12.0), (), b"", revision=0xA1FE)))
    assert isinstance(frame, Frame)
    made = parse(EXAMPLE.replace("fits_revision = 151", "fits_revision = 41470").encode())
    assert made.fits(frame.revision)
    assert not made.fits(0xFEA1)
    assert parse(EXAMPLE.replace("fits_revision = 151", "fits_revision = 65535").encode()).fits(65535)


def test_it_says_when_and_for_which_revision_it_is() -> None:
    made = parse(EXAMPLE.encode())
    assert made.valid_at(MARCH)
    assert made.valid_at(made.valid_from)
    assert not made.valid_at(made.valid_from - 1)
    assert not made.valid_at(made.valid_until)
    assert made.fits(151)
    assert made.fits(None)
    assert not made.fits(150)
    assert made.in_range("rh", 20.0)
    assert not made.in_range("rh", 19.9)
    assert made.in_range("t", 99.0)  # it states none
