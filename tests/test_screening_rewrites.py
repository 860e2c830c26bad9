"""Forms that ngspice misreads or does not know, rewritten: compared with closed forms.

Kind of truth: closed form. The rational functions are evaluated by numpy at each frequency; switch
resistances, tables and limits are worked out by hand.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from modepair.circuits.screening import ScreenedModel, screen
from modepair.sweeps.faults import SpecError
from tests.spice_process import needs_ngspice, run_ngspice

Complex = npt.NDArray[np.complex128]


def screened(folder: Path, body: str, ports: str = "a b out", before: str = "") -> ScreenedModel:
    path = folder / "model.lib"
    path.write_text(f"{before}\n.subckt part {ports}\n{body}\n.ends\n")
    return screen(path, folder)


def refused(folder: Path, body: str, before: str = "") -> str:
    with pytest.raises(SpecError, match=r"model\.lib:") as caught:
        screened(folder, body, before=before)
    return str(caught.value)


def solved(
    folder: Path, model: ScreenedModel, a_v: float = 0.0, b_v: float = 0.0, sweep: str = "dec 10 1 100meg"
) -> dict[str, Complex]:
    """Drive a with 1 V AC; b is a DC voltage."""
    deck = (
        f"bench\nva a 0 dc {a_v!r} ac 1\nvb b 0 dc {b_v!r}\nxp a b out part\n{model.text}.ac {sweep}\n.end\n"
    )
    return run_ngspice(deck, folder)


TRANSFERS = {
    # text: numerator and denominator, the constant first
    "1/(1+s/6.28318530718e4)": ((1.0,), (1.0, 1 / 6.28318530718e4)),
    "-1e5/(1+s*{tau})": ((-1e5,), (1.0, 1.6e-3)),
    "(1+s*1e-5)/(1+s*1e-3)": ((1.0, 1e-5), (1.0, 1e-3)),
    "s*1e-4/(1+s*1e-4)": ((0.0, 1e-4), (1.0, 1e-4)),
    "3*(2+s*1u)/(5+s*4u)": ((6.0, 3e-6), (5.0, 4e-6)),
    "1/(1+0.02*s*1e-4+(s*1e-4)**2)": ((1.0,), (1.0, 2e-6, 1e-8)),
    "1/(1+s*s*1e-10)": ((1.0,), (1.0, 0.0, 1e-10)),
    "1e6/((1+s/60)*(1+s/6e6))": ((1e6,), (1.0, 1 / 60 + 1 / 6e6, 1 / 3.6e8)),
    "(s*s+1e8)/(s*s+2e3*s+1e8)": ((1e8, 0.0, 1.0), (1e8, 2e3, 1.0)),
    "s^2/(s^2+1.4142*1e4*s+1e8)": ((0.0, 0.0, 1.0), (1e8, 1.4142e4, 1.0)),
    "(1-s*1e-6)/(1+s*1e-6)": ((1.0, -1e-6), (1.0, 1e-6)),
    "1e-5*(1+s*1e-4)": ((1e-5, 1e-9), (1.0,)),
    "(1+s*1e-6)*(1+s*1e-4)/(1+s*1e-8)": ((1.0, 1.01e-4, 1e-10), (1.0, 1e-8)),
    "1+s*1e-5+s*s*1e-12": ((1.0, 1e-5, 1e-12), (1.0,)),
    "s*s*1e-10": ((0.0, 0.0, 1e-10), (1.0,)),
    "7": ((7.0,), (1.0,)),
    "s/(s*(1+s*1e-5))": ((1.0,), (1.0, 1e-5)),
    "lag(2)": ((2.0,), (1.0, 1.6e-3)),
}


@needs_ngspice
@pytest.mark.parametrize("letter", ["e", "g"])
@pytest.mark.parametrize("transfer", list(TRANSFERS))
def test_laplace_is_exact_in_ac(transfer: str, letter: str, tmp_path: Path) -> None:
    before = ".param tau=1.6m\n.func lag(k) {k/(1+s*tau)}"
    outputs = "out 0" if letter == "e" else "0 out"
    # Driven by a plain voltage (E) and by an expression of slope 3 at its operating point (G).
    source = "V(a,b)" if letter == "e" else "V(a)*V(b)"
    model = screened(
        tmp_path, f"{letter}1 {outputs} LAPLACE {{{source}}} = {{{transfer}}}\nrl out 0 1", before=before
    )
    assert "laplace" not in model.text
    found = solved(tmp_path, model, 0.0, 0.0 if letter == "e" else 3.0)
    numerator, denominator = TRANSFERS[transfer]
    s = 2j * np.pi * found["frequency"].real
    expected = (
        np.polyval(numerator[::-1], s) / np.polyval(denominator[::-1], s) * (1.0 if letter == "e" else 3.0)
    )
    # 1e-9 of the largest is GMIN against the networks' conductance, and the round-off of a sum of parts near
    # a notch.
    assert (
        np.max(
            np.abs(found["out"] - expected) / np.maximum(np.abs(expected), 1e-6 * np.max(np.abs(expected)))
        )
        < 1e-6
    )


@needs_ngspice
@pytest.mark.parametrize(
    ("transfer", "gain"), [("5/(1+s*1u)", 5.0), ("(2+s*1m)/(4+s+s*s)", 0.5), ("s*1m", 0.0), ("3+s+s*s", 3.0)]
)
def test_laplace_is_right_at_dc(transfer: str, gain: float, tmp_path: Path) -> None:
    # The operating point shows in the slope of a square: 2 * gain * 1.5 V.
    body = f"e1 x 0 LAPLACE {{V(a)}} {{{transfer}}}\ne2 y 0 value={{V(x)*V(x)}}\nrx x 0 1k\nry y 0 1k\n"
    model = screened(tmp_path, f"{body}e3 out 0 value={{V(x)*V(a)+V(x)}}\nrl out 0 1k")
    found = solved(tmp_path, model, 1.5, sweep="lin 1 1u 1u")["out"].real
    assert found[0] == pytest.approx(2 * 1.5 * gain + gain, rel=1e-6, abs=1e-6)


def test_laplace_that_cannot_be_built_is_refused_by_name(tmp_path: Path) -> None:
    for transfer, reason in {
        "1/(1+s)**3": "LAPLACE of order 3; orders one and two are built",
        "exp(-s)": "not a ratio of polynomials in s: exp() of s is in it",
        "1/s": "a pole at zero frequency",
        "1/(1-s)": "a pole in the right half plane",
        "1/(1+sqrt(s))": "sqrt() of s is in it",
        "1/(s-s)": "it divides by zero",
        "s > 1 ? 1 : 2": "something else than + - * /",
        "V(a)/(1+s)": "something else than + - * /",
        "1/(1+1us)": "1us in LAPLACE could be a time or a product with s",
        "1/(1+s*q)": "parameter q is not defined",
    }.items():
        text = refused(tmp_path, f"e1 out 0 LAPLACE {{V(a)}} = {{{transfer}}}")
        assert "model.lib:3:" in text
        assert reason in text


def test_laplace_network_takes_names_that_are_free(tmp_path: Path) -> None:
    body = "e1 out 0 LAPLACE {2*V(a)} = {1/(1+s)}\nr1_w e1_w e1_u 1\nc1_w e1_w 0 1\nr9 e1_u b 1\nr8 out 0 1"
    text = screened(tmp_path, body).text
    assert "e1_u_2 0 value={2.0*v(a)}" in text
    assert "r1_w_2 e1_w_2 0 1000.0" in text
    assert "c1_w_2 e1_w_2 0 0.001" in text


def conductance(folder: Path, body: str, before: str, control_v: float, across_v: float = 0.0) -> float:
    """Return the AC conductance between a and ground with b the control."""
    model = screened(folder, f"{body}\nro out 0 1", before=before)
    return -float(solved(folder, model, across_v, control_v, sweep="lin 1 1k 1k")["i(va)"][0].real)


@needs_ngspice
@pytest.mark.parametrize(
    ("parameters", "control_v", "resistance_ohm"),
    [
        ("SW(RON=10 ROFF=1meg VT=1 VH=0)", 2.0, 10.0),
        ("SW(RON=10 ROFF=1meg VT=1 VH=0)", 0.5, 1e6),
        ("SW(RON=10 ROFF=1meg VT=1 VH=0.5)", 1.4, 1e6),
        ("SW(RON=10 ROFF=1meg VT=1 VH=0.5)", 1.6, 10.0),
        ("VSWITCH(RON=10 ROFF=1meg VON=2 VOFF=1)", 3.0, 10.0),
        ("VSWITCH(RON=10 ROFF=1meg VON=2 VOFF=1)", 0.0, 1e6),
        ("VSWITCH(RON=10 ROFF=1meg VON=2 VOFF=1)", 1.5, float(np.sqrt(1e7))),
        ("VSWITCH(RON=10 ROFF=1meg VON=1 VOFF=2)", 0.0, 10.0),
        ("VSWITCH(RON=10 ROFF=1meg VON=1 VOFF=2)", 2.5, 1e6),
        ("VSWITCH()", 2.0, 1.0),
    ],
)
def test_switches_are_what_their_operating_point_says(
    parameters: str, control_v: float, resistance_ohm: float, tmp_path: Path
) -> None:
    found = conductance(tmp_path, "s1 a 0 b 0 sm", f".model sm {parameters}", control_v)
    assert found == pytest.approx(1 / resistance_ohm, rel=1e-9)


@needs_ngspice
def test_current_switch_and_initial_state(tmp_path: Path) -> None:
    before = ".model wm ISWITCH(RON=2 ROFF=1k ION=1m IOFF=0.5m)\n.model wc CSW(RON=2 ROFF=1k IT=1m IH=0.2m)"
    control = "vc b x 0\nrc x 0 1k\nw1 a 0 vc {}"
    assert conductance(tmp_path, control.format("wm"), before, 2.0) == pytest.approx(1 / 2)
    assert conductance(tmp_path, control.format("wm"), before, 0.1) == pytest.approx(1 / 1000)
    assert conductance(tmp_path, control.format("wc"), before, 1.1) == pytest.approx(1 / 1000)
    assert conductance(tmp_path, control.format("wc ON"), before, 1.1) == pytest.approx(1 / 2)


@needs_ngspice
@pytest.mark.parametrize(
    ("expression", "a_v", "slope"),
    [
        ("LIMIT(4*V(a),-1,1)", 0.1, 4.0),
        ("LIMIT(4*V(a),-1,1)", 0.5, 0.0),
        ("IF(V(a)>0, 3*V(a), 5*V(a))", 0.5, 3.0),
        ("IF(V(a)>0, 3*V(a), 5*V(a))", -0.5, 5.0),
        ("TABLE(V(a),-1,-2,1,2,3,3)", 0.5, 2.0),
        ("TABLE(V(a),-1,-2,1,2,3,3)", 2.0, 0.5),
        ("TABLE(V(a),-1,-2,1,2,3,3)", 5.0, 0.0),
        ("TABLE(V(a),-1,-2,1,2,3,3)", -5.0, 0.0),
        ("V(a)**2", -1.5, -3.0),
        ("V(a)**1.5", 4.0, 3.0),
        ("abs(V(a))**3", -2.0, -12.0),
        ("PWR(abs(V(a)),3)", -2.0, -12.0),
        ("PWRS(V(a),3)", -2.0, 12.0),
        ("STP(V(a))*V(a)", 2.0, 1.0),
        ("V(a)*TEMP/27", 0.0, 1.0),
        ("V(a)*VT/0.0258649", 0.0, 1.0),
        ("(V(a)>1 | V(b)<0) & V(a)<3 ? 7*V(a) : V(a)", 2.0, 7.0),
        ("(V(a)>1 | V(b)<0) & V(a)<3 ? 7*V(a) : V(a)", 4.0, 1.0),
    ],
)
def test_expressions_have_the_slope_they_state(
    expression: str, a_v: float, slope: float, tmp_path: Path
) -> None:
    model = screened(tmp_path, f"e1 out 0 VALUE={{{expression}}}\nrl out 0 1k")
    found = solved(tmp_path, model, a_v, sweep="lin 1 1k 1k")["out"][0]
    # 1e-6 for the constants typed with six digits above; ngspice's own derivatives are exact.
    assert found == pytest.approx(slope, rel=2e-6, abs=1e-9)


@needs_ngspice
@pytest.mark.parametrize(("a_v", "slope"), [(0.5, 2.0), (0.99, 2.0), (1.01, 0.5), (4.0, 0.0)])
def test_table_element_has_sharp_corners_and_flat_ends(a_v: float, slope: float, tmp_path: Path) -> None:
    model = screened(tmp_path, "e1 out 0 TABLE {V(a)} = (-1,-2) (1,2) (3,3)\nrl out 0 1k")
    assert solved(tmp_path, model, a_v, sweep="lin 1 1k 1k")["out"][0] == pytest.approx(slope, abs=1e-9)


@needs_ngspice
def test_area_and_substrate_that_ngspice_misreads(tmp_path: Path) -> None:
    """A positional area after a global model, and a substrate in brackets, fail or float in ngspice
    itself."""
    before = ".model dx d(is=1e-9)\n.model qx npn(is=1e-15 cjs=1n)"
    one = conductance(tmp_path, "d1 a 0 dx", before, 0.0, 0.3)
    assert conductance(tmp_path, "d1 a 0 dx 3", before, 0.0, 0.3) == pytest.approx(3 * one, rel=1e-6)
    text = screened(
        tmp_path, "q1 a b out [0] qx 2\nq2 a b out qx\nq3 a b out s9 qx\nr1 s9 0 1", before=before
    ).text
    assert "q1 a b out 0 qx area=2.0\nq2 a b out qx\nq3 a b out s9 qx\n" in text


@pytest.mark.parametrize(
    ("body", "reason"),
    [
        ("e1 out 0 value={V(a)**3}", "the power 3 of a value that may be negative"),
        ("e1 out 0 value={-V(a)**2}", "a sign before a power is read in two ways"),
        ("e1 out 0 value={2**3**2*V(a)}", "a^b^c is read in two ways"),
        ("e1 out 0 value={PWR(V(a),3)}", "PWR(x,y) is abs(x)^y in PSpice and keeps the sign of x in ngspice"),
        ("e1 out 0 value={V(a)<V(b)<1}", "two comparisons in a row"),
        ("e1 out 0 value={LIMIT(V(a),1,-1)}", "limits in the wrong order"),
        ("e1 out 0 value={TABLE(V(a),1,0,0,1)}", "do not rise from point to point"),
        ("e1 out 0 value={V(a)*TIME}", "TIME has no meaning in an AC sweep"),
        ("e1 out 0 value={V(nowhere)}", "node nowhere is connected to nothing"),
        ("e1 out 0 value={I(r1)}\nr1 a 0 1", "r1 is not a voltage source of this subcircuit"),
        ("e1 out 0 value={(V(a)>1)^(V(b)>1)}", "exclusive-or in one dialect"),
        ("e1 out 0 value={SDT(V(a))}", "sdt() fails in ngspice"),
        ("e1 out 0 value={1/0*V(a)}", "a division by zero"),
        ("e1 out 0 value={sqrt(-1)*V(a)}", "sqrt() has no value for -1"),
        ("e1 out 0 poly(1) a 0 4", "a gain in SPICE2 and a constant in ngspice"),
        ("e1 out 0 poly(2) a 0 b 0 0 1,000 2", "a comma between digits"),
        ("e1 out 0 a b", "the gain of e1 is missing"),
        ("e1 out 0 value={V(a)}\nbe1 out 0 v=1", "ngspice makes an element be1 of e1"),
        ("r1 a e1_int1 1\ne1 out 0 value={V(e1_int1)}", "the name of a node that ngspice makes itself"),
        ("k1 l1 l2 0.5\nl1 a 0 1m", "l2 is not an inductor of this subcircuit"),
        ("k1 l1 l2 1.5\nl1 a 0 1m\nl2 b 0 1m", "the coupling is 1.5; it lies between 0 and 1"),
        ("f1 out 0 v9 2", "v9 is not a voltage source of this subcircuit"),
        ("x1 a b other", "subcircuit other is not defined"),
        ("d1 a b dx", "model dx is not defined"),
        ("q1 a b out dx\n.model dx d(is=1f)", "model dx is of type D and not a bipolar model"),
        ("d1 a b dx\n.model dx d(is=1f nonsense=1)", "nonsense is not a parameter of D that is taken"),
        ("m1 a b out 0 mx\n.model mx nmos(level=1 theta=1)", "theta is not a parameter of NMOS at level 1"),
        ("r1 a b rr", "r1 has no value"),
        ("r1 a b rr 1k", "model rr is not defined"),
        ("r1 a b {V(a)}", "this value depends on a voltage or a current"),
        ("v1 a b sin(0 1 1k)", "the waveform sin and no DC value"),
        ("i1 a b 1 2", "a second DC value"),
        ("s1 a b out 0 sm\n.model sm sw(ron=0)", "a resistance of zero or less"),
        (".param temp=25", "temp has a value of its own in SPICE"),
        (".func max(a) {a}", "function max has a meaning of its own"),
        (".subckt inner a a\nr1 a 0 1\n.ends", "port a is named twice"),
        (".subckt inner a 0\nr1 a 0 1\n.ends", "0 is ground and cannot be a port"),
    ],
)
def test_ambiguous_or_empty_cards_are_refused(body: str, reason: str, tmp_path: Path) -> None:
    text = refused(tmp_path, f"{body}\nrz out 0 1k")
    assert reason in text.replace("time has", "TIME has")


def test_instances_are_checked_against_what_they_name(tmp_path: Path) -> None:
    before = ".subckt inner p n params: k=1\nr1 p n {k}\n.ends"
    assert "x1 gives 3 nodes to inner, which has 2 ports" in refused(tmp_path, "x1 a b out inner", before)
    assert "g is not a parameter of subcircuit inner" in refused(tmp_path, "x1 a b inner g=2", before)
    assert "a resistance is -1; it must be above zero" in refused(tmp_path, "x1 a b inner k=-1", before)
    text = screened(
        tmp_path, "x1 a b inner k=2\nx2 a b inner\nx3 a b inner params: k={1+1}\nr1 out 0 1", before=before
    ).text
    assert "x1 a b inner_2\nx2 a b inner\nx3 a b inner_2\n" in text


def test_a_parameter_that_means_two_things_is_refused(tmp_path: Path) -> None:
    before = ".param k=5\n.subckt inner p n\nr1 p n {k}\n.ends"
    text = refused(tmp_path, ".param k=7\nx1 a b inner\nr1 out 0 {k}", before)
    assert "parameter k of the file is used in inner and has another value in part" in text


def test_a_port_named_gnd_is_a_port_and_a_node_named_gnd_is_ground(tmp_path: Path) -> None:
    path = tmp_path / "model.lib"
    path.write_text(
        ".subckt one in gnd\nr1 in gnd 1\n.ends\n.subckt two in out\nr1 in gnd 1\nr2 out 0 1\n.ends\n"
    )
    model = screen(path, tmp_path)
    assert ".subckt one in gnd_\nr1 in gnd_ 1.0\n" in model.text
    assert ".subckt two in out\nr1 in 0 1.0\n" in model.text
    assert model.subcircuits == {"one": ("in", "gnd"), "two": ("in", "out")}
    assert "model.lib:5: node gnd is ground, as in ngspice" in model.rewrites


def test_a_prefix_lets_several_files_into_one_deck(tmp_path: Path) -> None:
    path = tmp_path / "model.lib"
    path.write_text(".model dx d(is=1f)\n.subckt a p n\nd1 p n dx\n.ends\n.subckt b p n\nx1 p n a\n.ends\n")
    model = screen(path, tmp_path, prefix="c1_")
    assert ".model c1_dx d(" in model.text
    assert "d1 p n c1_dx\n.ends c1_a" in model.text
    assert "x1 p n c1_a" in model.text
    assert model.subcircuits == {"c1_a": ("p", "n"), "c1_b": ("p", "n")}
    with pytest.raises(ValueError, match="prefix must be small letters"):
        screen(path, tmp_path, prefix="C 1")


def test_names_that_ngspice_takes_for_words_are_spelt_otherwise(tmp_path: Path) -> None:
    text = screened(tmp_path, "e1 poly 0 a b 2\nr1 poly value 1k\nc1 value off 1n\nr2 off out {1k}").text
    assert "e1 poly_ 0 a b 2.0\nr1 poly_ value_ 1000.0\nc1 value_ off_ 1e-09\nr2 off_ out 1000.0" in text


def test_a_file_is_named_as_the_user_names_it(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "real").mkdir()
    (tmp_path / "real" / "model.lib").write_text(".bogus\n")
    (tmp_path / "spec").symlink_to("real")
    monkeypatch.chdir(tmp_path)
    for path, root in (
        ("spec/model.lib", "."),
        ("real/model.lib", "."),
        (tmp_path / "spec" / "model.lib", tmp_path),
    ):
        with pytest.raises(SpecError, match=r"^(spec|real)/model\.lib:1:1: \.bogus"):
            screen(Path(path), Path(root))
