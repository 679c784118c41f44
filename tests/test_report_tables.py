"""Each number of a table stands in its row and column."""

from __future__ import annotations

import pytest

from fieldmover.report import tables
from fieldmover.report.tables import Table
from fieldmover.report.text import in_short


def cell(table: Table, row: str, head: str) -> str:
    (found,) = [line for line in table.rows if line[0].strip() == row]
    assert len(found) == len(table.heads)
    return found[table.heads.index(head)]


def test_steps():
    def field(number):
        norms = {"linf": number, "l1": number + 1, "l2": number + 2}
        return {"divergence": {**norms, "scaled": {"linf": number + 3}}, "energy": {"total": number + 4}}

    names = ("source", "cleaned", "moved", "stored")
    report = {
        "fields": {name: field(10 * i) for i, name in enumerate(names)},
        "energy_covered": dict(zip(names, (100.0, 99.0, 97.0, 98.0), strict=True)),
        "figures": {"energy_lost": {"cleaning": 0.01, "moving": 0.02, "storing": -0.01}, "energy_change": -0.02},
    }
    table = tables.steps(report)
    assert cell(table, "divergence, root mean square", "moved") == "22"
    assert cell(table, "divergence, mean", "stored") == "31"
    assert cell(table, "h |div B| / |B|, largest", "cleaned") == "13"
    assert cell(table, "magnetic energy, whole grid", "source") == "4"
    assert cell(table, "magnetic energy, covered part", "stored") == "98"
    for loss, step, value in (
        ("cleaning", "cleaned", "0.01"),
        ("moving", "moved", "0.02"),
        ("storing", "stored", "-0.01"),
    ):
        row = f"lost to {loss}, relative"
        assert [cell(table, row, name) for name in names] == [value if name == step else "" for name in names]
    assert cell(table, "change in all, relative", "stored") == "-0.02"
    report |= {"fluid": {"rho": {"moved": 3.0, "source": 4.0, "change": 1e-16}}, "coverage": None}
    said = " ".join(in_short(report))
    assert "at most 0 in the source, 30 in the field as stored" in said
    assert "100 in the source, 98 as stored: cleaning took 0.01, moving took 0.02, storing added 0.01 of it" in said
    assert "Total of rho: 3 of 4 lies in the target; as stored it differs by 1.000e-16" in said


def test_totals_name_what_is_rare_only_where_it_is():
    found = {"source": 1.0, "moved": 2.0, "added_outside": 3.0, "stored": 4.0, "change": 5.0}
    heads = ("", "source", "moved", "added outside", "stored", "change")
    table = tables.totals({"fluid": {"rho": {**found, "added_by_cure": 0.0}}})
    assert table.heads == heads
    assert table.rows[0] == ("total of rho", "1", "2", "3", "4", "5")
    table = tables.totals({"fluid": {"rho": {**found, "removed_by_blend": 6.0, "added_by_cure": 7.0}}})
    assert cell(table, "total of rho", "removed by blend") == "6"
    assert cell(table, "total of rho", "added by cure") == "7"
    assert cell(table, "total of rho", "stored") == "4"


def test_the_gas():
    def sums(n):
        return {"mass": n, "momentum": {"x": n + 1, "y": n + 2, "z": n + 3}, "kinetic_energy": None}

    change = {"mass": 0.1, "momentum": 0.2, "kinetic_energy": None}
    table = tables.gas({"gas": {"before": sums(10.0), "stored": sums(20.0), "change": change}})
    assert [cell(table, "mass", head) for head in ("source", "stored", "change")] == ["10", "20", "0.1"]
    assert [cell(table, "momentum, y", head) for head in ("source", "stored", "change")] == ["12", "22", ""]
    assert cell(table, "momentum, size of the change", "change") == "0.2"
    assert cell(table, "kinetic energy", "source") == "-"


def test_what_is_measured_beside_the_steps():
    surface = {"source_flux": 1.0, "flux": 2.0, "change": 3.0, "source_unsigned": 4.0, "unsigned": 5.0}
    table = tables.surfaces({"surfaces": {"lid": surface}, "surfaces_meant": {"lid": "a disc"}})
    assert table.rows[0] == ("lid", "1", "2", "3", "4", "5", "a disc")
    assert table.heads[1:6] == ("flux, source", "flux, stored", "change", "unsigned, source", "unsigned, stored")
    stored = {"value": 1.0, "energy": 2.0, "reference_energy": 3.0, "free_energy": 4.0}
    table = tables.helicity({"helicity": {"stored": stored}, "helicity_missing": {"source": "why"}})
    assert cell(table, "free energy", "stored") == "4"
    assert cell(table, "energy of the reference", "stored") == "3"
    assert cell(table, "relative helicity", "source") == "not measured"
    assert "source: why." in table.note
    at = {"stored": {"beta_smallest": {"cell": [1, 2, 3], "position": [0.5, 0.25, -1.0]}}}
    found = {"source": {"beta_smallest": 0.1}, "stored": {"beta_smallest": 0.2, "speed_largest": None}}
    table = tables.extremes({"extremes": found, "extremes_at": at})
    assert [row[0] for row in table.rows] == ["smallest beta, source", "smallest beta, stored"]
    assert table.rows[0][1:] == ("0.1", "-", "-")
    assert table.rows[1][1:] == ("0.2", "[1, 2, 3]", "0.5, 0.25, -1")
    region = {"divergence": 1.0, "energy": 2.0, "energy_change": 3.0, "strength": 4.0}
    table = tables.regions({"regions": {"core": region}})
    assert [cell(table, "region core", head) for head in table.heads[1:]] == ["1", "2", "3", "4"]


def test_what_some_jobs_do():
    spin = {"source": 1.0, "arrived": 2.0, "moved": 3.0, "stored": 4.0, "turn": 5.0}
    assert tables.turning({"angular_momentum": spin}).rows[0][1:] == ("1", "2", "3", "4", "5")
    box = {"group": "/fine", "divergence": 1.0, "energy": 2.0, "mass": 3.0, "grid": "<a box>"}
    assert tables.boxes({"boxes": [box]}).rows[0] == ("/fine", "1", "2", "3", "a box")
    found = tables.charge({"charge": {"net_flux": 0.5, "cell": [1, 2, 3], "centre": [0.0, 0.0, 0.5]}})
    assert list(found.rows) == [("net flux", "0.5"), ("cell", "1, 2, 3"), ("centre", "0, 0, 0.5")]
    found = tables.perturbation({"perturbation": {"size": 0.01, "seed": 7, "energy_change": None}})
    assert list(found.rows) == [("size", "0.01"), ("seed", "7"), ("energy change", "none")]


def test_the_receiving_codes_stencil():
    norms = {"linf": 3.0, "l1": 1.0, "l2": 2.0}
    found = {**norms, "scaled": {name: 10 * v for name, v in norms.items()}, "net_flux": 7.0, "cell": [1, 2, 3]}
    table = tables.stencil({"stencil": {"stencil": "corners", **found}})
    assert "corners" in table.caption
    assert [row[1:] for row in table.rows] == [("3", "30"), ("2", "20"), ("1", "10")]
    assert "7. Worst cell: [1, 2, 3]" in table.note
    assert tables.stencil({"stencil": {"stencil": "faces", **found}}).rows == []  # the steps have it


def test_comparisons():
    report = {
        "against": {"figures": {"energy.total": {"before": 1.0, "after": 2.0, "change": 1.0, "relative": 0.5}}},
        "figures": {"against": {"mean_error": 0.25}},
        "files": {"other": {"name": "old.h5"}},
        "agreement": {"cosine": 0.9, "mean_error": 0.1, "overlap": 0.8},
    }
    table = tables.against(report)
    assert [cell(table, "energy.total", head) for head in ("old.h5", "target", "relative change")] == ["1", "2", "0.5"]
    assert cell(table, "mean error", "target") == "0.25"
    table = tables.agreement(report)
    assert [row[1:] for row in table.rows] == [("0.9", "1"), ("0.1", "0"), ("0.8", "")]
    both = {
        f"{key}_of_{way}": float(number)
        for number, (key, way) in enumerate(
            (key, way)
            for key in ("energy", "divergence", "largest_change", "seconds")
            for way in ("projection", "relaxation")
        )
    }
    table = tables.side_by_side({"side_by_side": {**both, "energy_of_difference": 0.5, "correlation": 0.75}})
    assert [row[1:] for row in table.rows] == [("0", "1"), ("2", "3"), ("4", "5"), ("6", "7")]
    assert table.heads == ("", "projection", "relaxation")
    assert "results: 0.5. Correlation of the two changes: 0.75" in table.note


@pytest.mark.parametrize(("count", "applied", "word"), [(0, False, "-"), (2, False, "no"), (2, True, "yes")])
def test_health(count, applied, word):
    rule = {
        "rule": "density", "count": count, "first": [0, 0, 1], "worst": None, "value": 1.0, "limit": 2.0,
        "mass_added": 3.0, "energy_added": 4.0, "applied": applied,
    }  # fmt: skip
    table = tables.health({"health": [rule]})
    assert table.rows[0] == ("density", str(count), "[0, 0, 1]", "-", "1", "2", "3", "4", word)
    assert table.heads[4:8] == ("value there", "allowed", "mass added", "energy added")


def test_there_is_no_table_of_nothing():
    report = {"regions": {}, "against": None, "fluid": {}}
    for make in (
        tables.totals, tables.gas, tables.health, tables.stencil, tables.surfaces, tables.helicity, tables.extremes,
        tables.turning, tables.boxes,
        tables.charge, tables.perturbation, tables.regions, tables.agreement, tables.against, tables.side_by_side,
    ):  # fmt: skip
        assert not make(report).rows
