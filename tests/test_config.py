"""The config: defaults, exact numbers, and one plain sentence for every mistake."""

from __future__ import annotations

import json
import pickle
from decimal import Decimal
from pathlib import Path

import pytest
from flint import fmpq

from loopint.pipeline.config import ConfigError, RunConfig, config_as_dict, load_config
from loopint.pipeline.errors import unknown_name

MINIMAL = """
[points]
file = "points.parquet"

[[integral]]
name = "alder_birch"
family = "bubble"
p_squared = "p2"
m1_squared = "m_alder**2"
m2_squared = 0.1

[output]
directory = "runs/test"
"""

FULL = """
title = "Hidden sector"

[points]
file = "points.parquet"
key = "point"

[[integral]]
name = "alder_cedar"
family = "bubble"
powers = [1, 1]
dimension = 4
orders = [-1, 2]
p_squared = "(m_alder + 1/3)**2"
m1 = "m_alder"
m2 = "m_cedar"
width2 = "0.01*m_cedar"

[[integral]]
name = "cedar"
family = "tadpole"
powers = [2]
m_squared = ["m_cedar**2", -0.1]

[conventions]
mu_squared = "m_alder**2"
propagator_sign = "euclidean"
measure = "r_gamma"

[accuracy]
digits = 40
snap_tolerance = 1e-9
max_precision_bits = 4000

[cross_check]
fraction = "all"
digits = 12
seed = 7
arithmetic = "mpmath"

[output]
directory = "runs/full"
layout = "wide"
formats = ["parquet", "csv"]

[execution]
engine = "local"
workers = 3
chunk_rows = 10
"""


def write(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "run.toml"
    path.write_text(text, encoding="utf-8")
    return path


def load(tmp_path: Path, text: str) -> RunConfig:
    return load_config(write(tmp_path, text))


def refusal(tmp_path: Path, text: str) -> str:
    """Load a bad config and return what its user reads, without the file name."""
    path = write(tmp_path, text)
    with pytest.raises(ConfigError) as caught:
        load_config(path)
    message = str(caught.value)
    assert message.startswith(str(path))
    assert "\n" not in message
    assert "accepted" in message
    assert len(message) < 500
    return message.removeprefix(f"{path}").removeprefix(": ")


def changed(old: str, new: str, text: str = FULL) -> str:
    assert old in text
    return text.replace(old, new, 1)


# ---------------------------------------------------------------- what is read


def test_defaults(tmp_path: Path) -> None:
    config = load(tmp_path, MINIMAL)
    assert config.title == ""
    assert config.points.key is None
    (integral,) = config.integrals
    assert integral.integral.powers == (1, 1)
    assert integral.integral.dimension == 4
    assert integral.integral.orders == (-1, 0)
    assert integral.expressions()["m2_squared"].constant == fmpq(1, 10)  # TOML 0.1 is 1/10
    assert config.conventions.mu_squared.constant == 1
    assert config.conventions.propagator_sign == "minkowski"
    assert config.conventions.measure == "msbar"
    assert config.accuracy.digits == 16
    assert config.accuracy.snap_tolerance == 0
    assert config.accuracy.max_precision_bits == 20000
    assert config.cross_check.fraction == Decimal("0.01")
    assert config.cross_check.digits == 10
    assert config.cross_check.seed == 1
    assert config.cross_check.arithmetic == "balls"
    assert config.output.directory == Path("runs/test")
    assert config.output.layout == "long"
    assert config.output.formats == ("parquet",)
    assert config.execution.engine == "local"
    assert config.execution.workers is None
    assert config.execution.chunk_rows is None
    assert config.execution.scheduler is None


def test_every_key(tmp_path: Path) -> None:
    config = load(tmp_path, FULL)
    bubble, tadpole = config.integrals
    assert config.title == "Hidden sector"
    assert config.points.key == "point"
    assert bubble.integral.orders == (-1, 2)
    assert set(bubble.expressions()) == {"p_squared", "m1", "m2", "width2"}
    assert tadpole.integral.powers == (2,)
    assert tadpole.expressions()["Im m_squared"].constant == fmpq(-1, 10)
    assert config.conventions.mu_squared.columns == {"m_alder"}
    assert config.conventions.measure == "r_gamma"
    assert config.accuracy.snap_tolerance == Decimal("1e-9")
    assert config.cross_check.fraction == "all"
    assert config.output.formats == ("parquet", "csv")
    assert config.execution.workers == 3


@pytest.mark.parametrize(
    ("fraction", "share"),
    [('"all"', 1), ('"none"', 0), ("0.25", Decimal("0.25")), ("1", 1), ("0", 0)],
)
def test_cross_check_share(tmp_path: Path, fraction: str, share: object) -> None:
    text = MINIMAL + f"[cross_check]\nfraction = {fraction}\n"
    assert load(tmp_path, text).cross_check.share == share


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        ("0.1", fmpq(1, 10)),
        ("3", fmpq(3)),
        ("1_000.5", fmpq(2001, 2)),
        ("1e-30", fmpq(1, 10**30)),
        ('"0.1"', fmpq(1, 10)),
        ('"1/3"', fmpq(1, 3)),
        ('"(1/2 + 0.25)**2"', fmpq(9, 16)),
    ],
)
def test_numbers_are_exact(tmp_path: Path, written: str, expected: fmpq) -> None:
    config = load(tmp_path, changed("m2_squared = 0.1", f"m2_squared = {written}", MINIMAL))
    assert config.integrals[0].expressions()["m2_squared"].constant == expected


def test_plain_data_is_json_and_complete(tmp_path: Path) -> None:
    config = load(tmp_path, FULL)
    data = config_as_dict(config)
    assert json.loads(json.dumps(data)) == data
    assert data["integral"][0]["p_squared"] == "(m_alder + 1/3)**2"
    assert data["integral"][1]["m_squared"] == ["m_cedar**2", "-0.1"]
    assert data["integral"][1]["orders"] == [-1, 0]  # defaults are filled in
    assert data["accuracy"] == {
        "digits": 40,
        "snap_tolerance": "0.000000001",
        "max_precision_bits": 4000,
        "time_limit": "600",
    }
    assert data["conventions"]["measure"] == "r_gamma"
    assert type(data["conventions"]["measure"]) is str


def test_plain_data_does_not_depend_on_how_things_are_written(tmp_path: Path) -> None:
    tidy = config_as_dict(load(tmp_path, FULL))
    untidy = changed('"(m_alder + 1/3)**2"', '"  (m_alder  +\\n 1/3)**2 "')
    untidy = changed("snap_tolerance = 1e-9", "snap_tolerance = 0.0000000010", untidy)
    untidy = changed('"points.parquet"', '"./points.parquet"', untidy)
    assert config_as_dict(load(tmp_path, "# a comment\n" + untidy)) == tidy


def test_pickle(tmp_path: Path) -> None:
    config = load(tmp_path, FULL)
    copy = pickle.loads(pickle.dumps(config))
    assert config_as_dict(copy) == config_as_dict(config)
    assert copy.where == config.where == f"{tmp_path / 'run.toml'}: "


def test_config_does_not_change(tmp_path: Path) -> None:
    config = load(tmp_path, MINIMAL)
    with pytest.raises(ValueError, match="frozen"):
        config.accuracy.digits = 3


def test_points_are_found_from_here_or_beside_the_config(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    configs, here = tmp_path / "configs", tmp_path / "here"
    configs.mkdir()
    here.mkdir()
    monkeypatch.chdir(here)
    path = write(configs, MINIMAL)
    assert load_config(path).points.file == Path("points.parquet")  # nowhere: named as written
    (configs / "points.parquet").touch()
    assert load_config(path).points.file == configs / "points.parquet"
    (here / "points.parquet").touch()
    assert load_config(path).points.file == Path("points.parquet")
    assert load_config(path).where == f"{path}: "


def test_byte_order_mark_is_harmless(tmp_path: Path) -> None:
    path = tmp_path / "run.toml"
    path.write_bytes(b"\xef\xbb\xbf" + MINIMAL.encode())
    assert load_config(path).accuracy.digits == 16


# ---------------------------------------------------------------- files that are no config


def test_not_a_config_file(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"none\.toml does not exist; accepted: a TOML file"):
        load_config(tmp_path / "none.toml")
    with pytest.raises(ConfigError, match="is a directory; accepted: a TOML file"):
        load_config(tmp_path)
    with pytest.raises(ConfigError, match=r"cannot be read: .*; accepted: a TOML file"):
        load_config(write(tmp_path, MINIMAL) / "inside")
    binary = tmp_path / "points.parquet"
    binary.write_bytes(b"PAR1\xff\xfe\x00")
    with pytest.raises(ConfigError, match=r"points\.parquet is not text in UTF-8; accepted"):
        load_config(binary)


@pytest.mark.parametrize(
    "text",
    [
        'title = "open',
        "a = 1\na = 2",
        "just words",
        "x = " + "[" * 5000,
        "x = " + "9" * 6000,
        "x = 1e99999999999999999999",
    ],
)
def test_not_toml(tmp_path: Path, text: str) -> None:
    message = refusal(tmp_path, text)
    assert "is not valid TOML" in message or "exponent is too large" in message


# ---------------------------------------------------------------- mistakes, in the user's terms

MISTAKES = [
    # unknown keys name the nearest known one
    ("digits = 40", "digit = 40", "[accuracy] digit is unknown; did you mean digits? accepted: "),
    ('title = "H', 'titel = "H', "titel is unknown; did you mean title? accepted: title, points, "),
    ("[points]", "[point]", "point is unknown; did you mean points?"),
    ("powers = [1, 1]", "power = [1, 1]", '[[integral]] "alder_cedar" power is unknown; did you '),
    ("width2 =", "Width2 =", '[[integral]] "alder_cedar" Width2 is unknown; did you mean width'),
    ("workers = 3", "threads = 3", "[execution] threads is unknown; accepted: engine, schedul"),
    ("[execution]", "[[comparisons]]\n[execution]", "comparisons is unknown; did you mean "),
    ("powers = [2]", 'derivatives = ["p_squared"]', "names out of m_squared"),
    # sections
    ("[conventions]", "[[conventions]]", "conventions = [{...}] is not a section; accepted: [conv"),
    ("[[integral]]", "[integral_]", "integral_ is unknown; did you mean integral?"),
    # values out of range or of the wrong kind
    ("digits = 40", "digits = 3", "[accuracy] digits = 3; accepted: an integer from 5 to 2000"),
    ("digits = 40", "digits = 2001", "[accuracy] digits = 2001; accepted: an integer from 5 to"),
    ("digits = 40", "digits = 30.0", "[accuracy] digits = 30.0; accepted: an integer from 5 to"),
    ("digits = 40", 'digits = "30"', '[accuracy] digits = "30"; accepted: an integer from 5 to'),
    ("digits = 40", "digits = true", "[accuracy] digits = true; accepted: an integer from 5 to"),
    ("= 1e-9", "= 0.1", "[accuracy] snap_tolerance = 0.1; accepted: a number from 0 to below 0.1"),
    ("= 1e-9", "= -1e-9", "[accuracy] snap_tolerance = -1E-9; accepted: a number from 0 to below"),
    ("= 1e-9", "= nan", "[accuracy] snap_tolerance = NaN; accepted: a number from 0 to below 0.1"),
    ("= 4000", "= 63", "[accuracy] max_precision_bits = 63; accepted: an integer from 64 to 10000"),
    ('"all"', "1.5", '[cross_check] fraction = 1.5; accepted: a number from 0 to 1, "all" or "non'),
    ('"all"', '"some"', '[cross_check] fraction = "some"; accepted: a number from 0 to 1, "all" o'),
    ('"all"', "false", "[cross_check] fraction = false; accepted: a number from 0 to 1"),
    ("digits = 12", "digits = 4", "[cross_check] digits = 4; accepted: an integer from 5 to 200"),
    ("seed = 7", "seed = -1", "[cross_check] seed = -1; accepted: an integer from 0 to 2^63 - 1"),
    ('"mpmath"', '"doubles"', '[cross_check] arithmetic = "doubles"; accepted: "balls" or "mpmath'),
    ('"wide"', '"tall"', '[output] layout = "tall"; accepted: "long" or "wide"'),
    ('["parquet", "csv"]', '["xml"]', '[output] formats = ["xml"]; accepted: an array of "parquet'),
    ('["parquet", "csv"]', "[]", '[output] formats = []; accepted: an array of "parquet", "csv"'),
    ('"runs/full"', '""', '[output] directory = ""; accepted: the path of a directory'),
    ('directory = "runs/full"', "", "[output] directory is missing; accepted: the path of a dir"),
    ('file = "points.parquet"', "", "[points] file is missing; accepted: the path of a Parquet"),
    ('key = "point"', "key = 3", "[points] key = 3; accepted: the name of a column"),
    ('"local"', '"threads"', '[execution] engine = "threads"; accepted: "local" or "dask"'),
    ("workers = 3", "scheduler = 3", "[execution] scheduler = 3; accepted: with engine = "),
    ("workers = 3", 'scheduler = "a:1"', '[execution] scheduler = "a:1"; accepted: with engine'),
    ("workers = 3", 'scheduler = "tcp://a:1"', '[execution] scheduler = "tcp://a:1" needs engine'),
    ('"local"', '"dask"\nscheduler = "tcp://a:1"', "[execution] workers = 3 cannot be chosen w"),
    ("workers = 3", "workers = 0", "[execution] workers = 0; accepted: an integer from 1 to 1024"),
    ("rows = 10", "rows = 0", "[execution] chunk_rows = 0; accepted: an integer from 1 to 1000000"),
    ('"r_gamma"', '"ms_bar"', '[conventions] measure = "ms_bar"; accepted: msbar, plain, gamma, r'),
    ('"euclidean"', '"mostly_plus"', '[conventions] propagator_sign = "mostly_plus"; accepted: mi'),
    ('title = "Hidden sector"', "title = 3", "title = 3; accepted: a line of text"),
    # the integral
    ('name = "cedar"', 'name = "alder_cedar"', 'name = "alder_cedar" is given 2 times; accepted'),
    ('name = "cedar"', 'name = "2nd"', '[[integral]] "2nd" name = "2nd"; accepted: a letter'),
    ('name = "cedar"', "", "[[integral]] number 2 name is missing; accepted: a letter"),
    ('"tadpole"', '"triangle"', "family = 'triangle' is unknown; accepted: tadpole, bubble"),
    ('"tadpole"', '["tadpole"]', 'family = ["tadpole"]; accepted: tadpole or bubble'),
    ("orders = [-1, 2]", "orders = [2, -1]", "orders = [2, -1] is upside down; accepted: lowest <"),
    ("orders = [-1, 2]", "orders = [0]", "orders = [0] is not a pair; accepted: "),
    ("orders = [-1, 2]", "orders = 2", "orders = 2; accepted: [lowest, highest]"),
    ("orders = [-1, 2]", "orders = [0, 1.5]", "orders = [0, 1.5]; accepted: two integers"),
    ("orders = [-1, 2]", "orders = [0, 99]", "orders = [0, 99]; accepted: two integers from -20"),
    ("powers = [1, 1]", "powers = [1]", "powers = [1]; accepted for a bubble: 2 integer(s)"),
    ("powers = [1, 1]", "powers = [1, 0.5]", "powers = [1, 0.5]; accepted for a bubble: 2 int"),
    ("powers = [2]", "powers = [101]", '[[integral]] "cedar" tadpole power 101; accepted: an int'),
    ("dimension = 4", "dimension = 13", "dimension = 13; accepted: an integer from 1 to 12"),
    ("dimension = 4", "dimension = 4.0", "dimension = 4.0; accepted: an integer from 1 to 12"),
    # the kinematics
    ('m1 = "m_alder"', "", "no mass is given; accepted: m1_squared, or m1 with or without width1"),
    ('m2 = "m_cedar"', "", "width2 needs m2; accepted: m2_squared, or m2 with or without width2"),
    ('m1 = "m_alder"', 'm1 = "a"\nm1_squared = 1', "m1_squared and m1 are both given; accepted: "),
    ('m2 = "m_cedar"', "m2_squared = 1", "m2_squared and width2 are both given; accepted: "),
    ('m1 = "m_alder"', "m1 = 1\nm = 1", "m does not belong to a bubble; accepted: p_squared, m1_s"),
    ("powers = [2]", "m1 = 1", "m1 does not belong to a tadpole; accepted: m_squared, m, width"),
    ("powers = [2]", "p_squared = 1", "p_squared does not belong to a tadpole; accepted: m_squa"),
    ('p_squared = "(m_alder + 1/3)**2"', "", "p_squared is missing; accepted: a number, a column"),
    ('"(m_alder + 1/3)**2"', '["p2", 1]', 'p_squared: ["p2", 1] is complex; accepted: a real'),
    ('"(m_alder + 1/3)**2"', '"p2 +"', "p_squared: 'p2 +' is not arithmetic on columns; accepted"),
    ('"(m_alder + 1/3)**2"', '"sqrt(p2)"', "p_squared: 'sqrt(p2)' is not allowed; accepted: numb"),
    ('"(m_alder + 1/3)**2"', '"9**9**9"', "p_squared: '9**9**9' has the exponent '9**9'; accepted"),
    ('"(m_alder + 1/3)**2"', "inf", "p_squared = Infinity; accepted: a number, a column, or arith"),
    ('"(m_alder + 1/3)**2"', "true", "p_squared = true; accepted: a number, a column, or arithme"),
    ('"(m_alder + 1/3)**2"', "1979-05-27", "p_squared = 1979-05-27; accepted: a number, a column"),
    ('"(m_alder + 1/3)**2"', "1e99999", "p_squared: '1E+99999' has a decimal exponent beyond +-10"),
    ('["m_cedar**2", -0.1]', "[1]", "m_squared: [1] has 1 entries; accepted: [re, im]"),
    ('["m_cedar**2", -0.1]', "{re = 1}", "m_squared = {...}; accepted: a number, a column, or ar"),
    ('["m_cedar**2", -0.1]', '["m", [1, 2]]', "m_squared: [1, 2] is complex; accepted: a real"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "sentence"), MISTAKES, ids=[m[1][:40] for m in MISTAKES])
def test_mistakes(tmp_path: Path, old: str, new: str, sentence: str) -> None:
    assert sentence in refusal(tmp_path, changed(old, new))


@pytest.mark.parametrize("text", ["a/(2 - 2)", "1/0", "0**-1 + a"])
def test_fixed_division_by_zero(tmp_path: Path, text: str) -> None:
    message = refusal(tmp_path, changed('"(m_alder + 1/3)**2"', f'"{text}"'))
    assert message.startswith('[[integral]] "alder_cedar" p_squared: division by zero in ')


def test_missing_sections(tmp_path: Path) -> None:
    missing = "[points] is missing; accepted: [points] with the keys file, key"
    assert refusal(tmp_path, "") == missing
    without = MINIMAL[: MINIMAL.index("[[integral]]")] + MINIMAL[MINIMAL.index("[output]") :]
    assert "[[integral]] is missing; accepted: [[integral]] with" in refusal(tmp_path, without)
    empty = "integral = []\n" + without
    assert "[[integral]] is missing; accepted: [[integral]] with" in refusal(tmp_path, empty)
    numbers = "integral = [3]\n" + without
    assert "[[integral]] number 1 = 3; accepted: [[integral]] with the keys name" in refusal(
        tmp_path, numbers
    )
    single = MINIMAL.replace("[[integral]]", "[integral]")
    assert "[integral] is written with single brackets; accepted: [[integral]]" in refusal(
        tmp_path, single
    )


def test_nearest_name() -> None:
    assert "did you mean m_alder?" in unknown_name("m_aldr", ["p2", "m_alder"])
    assert "did you mean M?" in unknown_name("m", ["p2", "M"])
    assert "did you mean" not in unknown_name("xyz", ["p2", "m_alder"])
    many = unknown_name("x", [f"column_{i}" for i in range(500)])
    assert len(many) < 500
