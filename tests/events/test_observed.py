"""Observed events read from every format and form; bad rows told with row and column, many of them summarised."""

import re

import astropy.units as u
import numpy as np
import pytest
from astropy.table import MaskedColumn, QTable, Table

from lensrate.errors import InputError
from lensrate.events.observed import Sample

PLAIN = {"event": ["M-1", "M-2"], "l": [1.2, 359.0], "b": [-2.9, 1.5], "t_E": [120.0, 20.0], "t_E_err": [6.0, 1.0]}


def table(**more):
    return Table({**PLAIN, **more})


def csv(tmp_path, text):
    path = tmp_path / "s.csv"
    path.write_text(text)
    return path


@pytest.mark.parametrize("ending", ["ecsv", "csv", "fits", "vot"])
def test_formats_agree(tmp_path, ending):
    t = table(pi_E=MaskedColumn([0.08, 0.0], mask=[False, True]), pi_E_err=MaskedColumn([0.01, 0], mask=[False, True]))
    path = tmp_path / f"s.{ending}"
    t.write(path, format={"csv": "ascii.csv", "ecsv": "ascii.ecsv", "vot": "votable"}.get(ending, ending))
    sample = Sample.read(path, frame="heliocentric")
    first, second = sample
    assert (first.name, second.name) == ("M-1", "M-2")
    assert (first.l, first.b) == (1.2, -2.9)
    assert first.solutions[0].measured["pi_E"].value == 0.08
    assert "pi_E" not in second.solutions[0].measured and second.t_E.value == 20.0
    assert "2 events" in sample.summary() and "pi_E of 1" in sample.summary()


def test_units_of_the_file(tmp_path):
    t = QTable(table())
    t["t_E"], t["t_E_err"] = [120, 20] * u.day, [6, 1] * u.day
    t["theta_E"], t["theta_E_err"] = [500, 2000] * u.uas, [50, 100] * u.uas
    t["t_E"] = t["t_E"].to(u.yr)
    t.write(tmp_path / "s.ecsv")
    event = Sample.read(tmp_path / "s.ecsv").events[0]
    assert event.t_E.value == pytest.approx(120.0) and event.t_E.lo == pytest.approx(6.0)
    assert event.solutions[0].measured["theta_E"].value == pytest.approx(0.5)
    t["theta_E"] = [1, 2] * u.day
    with pytest.raises(InputError, match="theta_E is in 'd', must be in 'mas'"):
        Sample.from_table(t)


def test_units_that_are_unknown_or_stand_over_text():
    """A unit is never dropped: hours are no days, and text in years is years."""
    t = table()
    t["t_E"].unit, t["t_E_err"].unit = "hours", "hours"
    with pytest.raises(InputError, match="column t_E has unit 'hours', which is not known; take 'd'"):
        Sample.from_table(t)
    t = table()
    t["t_E"] = [str(x / 365.25) for x in t["t_E"]]
    t["t_E"].unit = "yr"
    assert Sample.from_table(t).events[0].t_E.value == pytest.approx(120.0)
    t["t_E"].unit = "kpc"
    with pytest.raises(InputError, match="t_E is in 'kpc', must be in 'd'"):
        Sample.from_table(t)


def test_names_in_bytes_that_are_no_text_and_units_in_names():
    t = table()
    t["event"] = np.array([b"\xf0", b"A"])
    assert [e.name for e in Sample.from_table(t)] == ["\ufffd", "A"]
    t = table()
    t.rename_column("t_E", "t_E [d]")
    with pytest.raises(InputError, match="column 't_E \\[d\\]': name it 't_E'"):
        Sample.from_table(t)


def test_icrs_and_split_errors():
    t = table(t_E_lo=[3.0, 1.0], t_E_hi=[9.0, 1.0])
    t.remove_columns(["l", "b", "t_E_err"])
    t["ra"], t["dec"] = 267.92, -29.89
    sample = Sample.from_table(t)
    # OGLE-2011-BLG-0462 lies at l = 359.86, b = -1.62
    assert sample.events[0].l == pytest.approx(359.88, abs=0.05) and sample.events[0].b == pytest.approx(
        -1.66, abs=0.05
    )
    assert (sample.events[0].t_E.lo, sample.events[0].t_E.hi) == (3.0, 9.0)


def test_solutions_are_joined():
    t = Table({k: [v[0], v[0], v[1]] for k, v in PLAIN.items()})
    t["solution"], t["delta_chi2"] = ["u_0 > 0", "u_0 < 0", ""], [0.0, 1.4, 0.0]
    sample = Sample.from_table(t)
    assert len(sample) == 2 and sample.events[0].rows == (1, 2)
    assert [s.delta_chi2 for s in sample.events[0].solutions] == [0.0, 1.4]
    t["b"][1] = -2.0
    with pytest.raises(InputError, match="row 2, column l: not the place of row 1"):
        Sample.from_table(t)


def test_solutions_agree_in_place_across_zero_and_near_the_pole():
    row = {"event": ["a", "a"], "t_E": [20.0, 21.0], "t_E_err": [1.0, 1.0]}
    assert len(Sample.from_table(Table({**row, "l": [359.999, 0.001], "b": [1.0, 1.0]}))) == 1
    assert len(Sample.from_table(Table({**row, "l": [10.0, 11.0], "b": [89.99, 89.99]}))) == 1
    with pytest.raises(InputError, match="not the place of row 1"):
        Sample.from_table(Table({**row, "l": [10.0, 11.0], "b": [5.0, 5.0]}))


def test_what_is_typed_is_used_or_refused():
    from lensrate.events.rows import said_epoch

    one = table(frame=["geocentric"] * 2, t_0par=[60000.0, np.nan])
    sample = Sample.from_table(one, t_0par=60100.0)
    assert [e.t_0par for e in sample] == [60000.0, 60100.0]
    assert any("1 rows state a t_0par of their own" in n for n in sample.notes)
    one = table(frame=["geocentric"] * 2)
    one.meta["t_0par"] = 60000.0
    assert said_epoch(one.meta, 2460000.5, "") == 60000.0
    with pytest.raises(InputError, match="its header says t_0par = 60000"):
        Sample.from_table(one, t_0par=60100.0)
    assert any("no event is geocentric" in n for n in Sample.from_table(table(), "heliocentric", 60100.0).notes)
    assert any("weight is not used" in n for n in Sample.from_table(table(weight=[1.0, 2.0])).notes)


def test_bad_rows_are_told_in_order_and_repeated_events_too():
    n = 9
    rows = {"event": [f"e{i}" for i in range(n - 1)] + ["e0"], "l": [1.0] * n, "b": [-2.0] * (n - 1) + [-3.0]}
    rows |= {"ra": [268.0] * n, "t_E": [20.0, -1.0, 20.0, 20.0, -1.0, 20.0, 20.0, 20.0, 20.0]}
    rows |= {"t_E_err": [1.0, 1.0, 0.0, 1.0, 1.0, 1.0, 1.0, 0.0, 1.0], "pi_E": [0.1] * n, "pi_E_err": [0.1] * n}
    with pytest.raises(InputError) as told:
        Sample.from_table(Table(rows))
    words = str(told.value)
    assert [int(r) for r in re.findall(r"row (\d+), column", words)] == sorted({2, 3, 5, 8, 9})
    assert "row 9, column l: not the place of row 1, of the same event e0" in words
    rows["pi_E_err"][5:7] = 0.0, 0.0
    with pytest.raises(InputError, match=r"and 2 more \(1 in column t_E_err, 1 in column l\) in rows 8, 9"):
        Sample.from_table(Table(rows))
    twice = table(event=["e0", "e0"], l=[1.2, 1.2], b=[-2.9, -2.9])
    assert any("does not tell apart" in n and "e0 in rows 1, 2" in n for n in Sample.from_table(twice).notes)


def test_frames(tmp_path):
    assert any("does not say a frame" in n for n in Sample.from_table(table()).notes)
    assert not Sample.from_table(table(), "heliocentric").notes
    geo = Sample.from_table(table(frame=["geocentric", "heliocentric"], t_0par=[2455763.5, np.nan]))
    assert geo.events[0].frame == "geocentric" and geo.events[0].t_0par == pytest.approx(55763.0)
    assert geo.events[1].t_0par is None
    with pytest.raises(InputError, match="no reference epoch"):
        Sample.from_table(table(), "geocentric")
    with pytest.raises(InputError, match=r"5763\.5 given, must be MJD"):
        Sample.from_table(table(), "geocentric", 5763.5)
    t = table()
    t.meta["frame"] = "geocentric"
    with pytest.raises(InputError, match="correct one"):
        Sample.from_table(t, "heliocentric")
    head = "# frame: geocentric\n# t_0par: 55763.0\n# invented: true\nl,b,t_E,t_E_err\n1,-2.9,20,1\n"
    sample = Sample.read(csv(tmp_path, head))
    assert sample.events[0].t_0par == 55763.0 and sample.invented and sample.events[0].name == "row 1"


@pytest.mark.parametrize(
    "change, words",
    [
        ({"t_E": [-3.0, 20.0]}, r"row 1, column t_E: -3 d given, must be above 0"),
        ({"t_E": [120.0, 0.0]}, r"row 2, column t_E: 0 d given, must be above 0"),
        ({"t_E_err": [0.0, 1.0]}, r"row 1, column t_E_err: 0 d given, must be above 0"),
        ({"t_E_err": [6.0, np.nan]}, r"row 2, column t_E_err: no error of t_E"),
        ({"pi_E": [0.1, np.nan]}, r"row 1, column pi_E_err: no error of pi_E"),
        ({"pi_EN": [0.1, 0.1], "pi_EN_err": [0.1, 0.1]}, r"row 1, column pi_EE: no value, but pi_EN has one"),
        ({"b": [-2.9, 95.0]}, r"row 2, column b: 95 deg given"),
        ({"b": [-2.9, np.nan]}, r"row 2, column b: no value"),
        ({"t_E": ["twelve", "20"]}, r"row 1, column t_E: 'twelve' is not a number"),
        ({"t_E": [np.inf, 20.0]}, r"row 1, column t_E: inf d given"),
        ({"frame": ["geo", "heliocentric"]}, r"row 1, column frame: 'geo' given"),
        ({"theta_e": [1.0, 1.0]}, r"'theta_e' is not known, did you mean 'theta_E'"),
    ],
)
def test_bad_rows(change, words):
    with pytest.raises(InputError, match=words):
        Sample.from_table(table(**change))


def test_missing_columns_and_empty_files(tmp_path):
    t = table()
    t.remove_column("b")
    with pytest.raises(InputError, match="no columns l, b"):
        Sample.from_table(t)
    t = table()
    t.rename_column("t_E", "tE")
    with pytest.raises(InputError, match="did you mean 't_E'"):
        Sample.from_table(t)
    with pytest.raises(InputError, match="no rows"):
        Sample.read(csv(tmp_path, "l,b,t_E,t_E_err\n"))
    with pytest.raises(InputError, match="has no rows"):
        Sample.read(csv(tmp_path, ""))
    (tmp_path / "s.fits").write_text("no FITS at all")
    with pytest.raises(InputError, match="cannot be read as .fits"):
        Sample.read(tmp_path / "s.fits")
    with pytest.raises(InputError, match="no file"):
        Sample.read(tmp_path / "nothing.csv")


def test_ten_thousand_bad_rows_are_summarised():
    n = 10_000
    t = Table({"l": np.full(n + 1, 1.0), "b": np.full(n + 1, -2.9), "t_E": np.full(n + 1, -1.0)})
    t["t_E_err"] = 1.0
    t["t_E"][-1] = 20.0
    with pytest.raises(InputError) as told:
        Sample.from_table(t)
    text = str(told.value)
    assert len(text) < 600 and "row 1, column t_E" in text and "9995 more (9995 in column t_E)" in text
    assert text.endswith("the other rows are read with --skip-bad (skip_bad=True)")
    with pytest.raises(InputError) as none_left:
        Sample.from_table(t[:-1])
    assert "skip" not in str(none_left.value)
    sample = Sample.from_table(t, skip_bad=True)
    assert len(sample) == 1 and sample.left_out == n and sample.events[0].rows == (n + 1,)
    assert "10000 rows left out" in sample.summary()


def draws(tmp_path, n=500, meta=None, **change):
    rng = np.random.default_rng(5)
    t = Table({"t_E": rng.normal(120, 3, n), "pi_EN": rng.normal(0.1, 0.02, n), "pi_EE": rng.normal(-0.05, 0.01, n)})
    for name, value in change.items():
        t[name] = value
    head = {"l": 1.2, "b": -2.9, "prior": "uniform", "frame": "heliocentric", "event": "M-7"}
    t.meta.update({**head, **(meta or {})})
    for key in [k for k, v in t.meta.items() if v is None]:
        del t.meta[key]
    t.write(tmp_path / "d.ecsv", overwrite=True)
    return tmp_path / "d.ecsv"


def test_posterior_samples(tmp_path):
    (event,) = Sample.read(draws(tmp_path))
    assert event.name == "M-7" and event.solutions[0].draws.size == 500
    assert event.t_E.value == pytest.approx(120, abs=0.5) and event.t_E.lo == pytest.approx(3, abs=0.5)
    assert event.solutions[0].has("pi_EN", "pi_EE") and not event.solutions[0].has("theta_E")
    prior = {"t_E": "log-uniform", "pi_EN": "uniform", "pi_EE": "uniform"}
    d = Sample.read(draws(tmp_path, meta={"prior": prior})).events[0].solutions[0].draws
    assert np.allclose(d.ln_prior, -np.log(d.columns["t_E"])) and "log-uniform in t_E" in d.prior
    t = Table({k: [v[0]] for k, v in PLAIN.items() if not k.startswith("t_E")} | {"samples": ["d.ecsv"]})
    t.write(tmp_path / "t.ecsv")
    (event,) = Sample.read(tmp_path / "t.ecsv")
    assert event.solutions[0].draws.size == 500


@pytest.mark.parametrize(
    "change, words",
    [
        ({"meta": {"prior": None}}, "prior is not declared"),
        ({"meta": {"prior": "flat"}}, "'flat' is not known"),
        ({"meta": {"prior": {"t_E": "uniform"}}}, "prior of column pi_EN is not declared"),
        ({"meta": {"prior": "log-uniform"}}, "prior of pi_EE: log-uniform, but some samples"),
        ({"meta": {"prior": "column"}}, "needs a column ln_prior"),
        ({"meta": {"l": None}}, "says no place"),
        ({"meta": {"frame": "geocentric"}}, "no reference epoch"),
        ({"weight": np.zeros(500)}, "all weights are 0"),
        ({"theta_E": -np.ones(500)}, "row 1, column theta_E: -1 cannot be .500 such rows."),
    ],
)
def test_bad_samples(tmp_path, change, words):
    with pytest.raises(InputError, match=words):
        Sample.read(draws(tmp_path, **change))


def test_samples_with_a_missing_column(tmp_path):
    path = draws(tmp_path)
    for column, words in (("pi_EE", "pi_EN without pi_EE"), ("t_E", "no column 't_E'")):
        t = Table.read(path)
        t.remove_column(column)
        t.write(tmp_path / "e.ecsv", overwrite=True)
        with pytest.raises(InputError, match=words):
            Sample.read(tmp_path / "e.ecsv")


def test_what_may_name_an_event():
    plain = {k: v for k, v in PLAIN.items() if k != "event"}
    for label in ("name", "id"):
        sample = Sample.from_table(Table({**plain, label: ["a", "b"]}), "heliocentric")
        assert [e.name for e in sample] == ["a", "b"] and not sample.notes
    both = Sample.from_table(table(name=["x", "y"]), "heliocentric")
    assert [e.name for e in both] == ["M-1", "M-2"] and "columns not used: name" in both.notes


def test_shipped_samples_go_by_their_names():
    sample = Sample.read("marram_running")
    assert sample.invented and len(sample) == 6
    with pytest.raises(InputError, match="no file 'marram_runing'"):
        Sample.read("marram_runing")
