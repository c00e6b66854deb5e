#!/usr/bin/env python3
"""Writes the truth beside each netlist of tests/netlists: poles of the circuit linearised at its operating points, and the
cycles that its gate pattern makes. Nothing here runs a simulator; tests/netlists.rs holds both against ngspice."""

import json
import math
import pathlib
import re

import numpy as np
import scipy.linalg
import scipy.optimize

FOLDER = pathlib.Path(__file__).resolve().parent.parent / "tests" / "netlists"
SUFFIX = {"meg": 1e6, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12, "f": 1e-15, "k": 1e3, "": 1.0}
NUMBER = re.compile(r"(?<![\w.])(\d+\.?\d*(?:e[-+]?\d+)?)(meg|[munpfk])?(?!\w)")
THERMAL_V = 1.380649e-23 * 300.15 / 1.602176634e-19


def value(text, names):
    """A number with a suffix, or an expression in braces or quotes."""
    text = NUMBER.sub(lambda found: repr(float(found[1]) * SUFFIX[found[2] or ""]), text.strip("{}'"))
    functions = {"max": max, "ln": math.log, "exp": math.exp}
    return float(eval(text.replace("^", "**"), {"__builtins__": {}}, {**functions, **names}))


class Netlist:
    """Elements, models and parameters of one file."""

    def __init__(self, path):
        text = re.sub(r"\n\+", " ", path.read_text().split(".control")[0])
        self.parameters, self.models, self.elements = {}, {}, []
        for line in text.splitlines()[1:]:
            if line.startswith(".param"):
                for name, expression in re.findall(r"(\w+)=(\S+)", line):
                    self.parameters[name] = value(expression, self.parameters)
            elif line.startswith(".model"):
                name, fields = re.match(r"\.model (\w+) \w+\((.*)\)", line).groups()
                self.models[name] = {k: value(v, {}) for k, v in re.findall(r"(\w+)=(\S+)", fields)}
            elif line[:1].isalpha():
                self.elements.append(line.split(None, 3))
        pattern = next(e for e in self.elements if e[0] == "Vgate")[3]
        numbers = [value(word, {}) for word in re.search(r"\((.*)\)", pattern)[1].split()]
        self.gate = list(zip(numbers[0::2], numbers[1::2]))


def junction_f(model, reverse_v):
    """Depletion capacitance of a diode model in reverse."""
    return model.get("cjo", 0.0) * (1 + reverse_v / model.get("vj", 1.0)) ** -model.get("m", 0.5)


def node_capacitance_f(charge, volts):
    """Slope of a charge law Q(V(drain))."""
    law = lambda v: value(charge.replace("V(drain)", f"({v!r})"), {})
    step = 0.01
    return (8 * (law(volts + step) - law(volts - step)) - (law(volts + 2 * step) - law(volts - 2 * step))) / (12 * step)


def linearised(netlist, plateau):
    """Conductance, capacitance and inductor branches at the operating point: during the relaxation ring the secondary is
    open and the winding rests at the bulk voltage; on the plateau it conducts and lifts the drain by what it reflects."""
    p = netlist.parameters
    lifted = p["bulk_v"] + (p["reflected_v"] if plateau else 0.0)
    secondary = p["reflected_v"] / p["n"] if plateau else 0.0
    bias = {"0": 0.0, "bulk": p["bulk_v"], "drain": lifted, "anode": secondary, "out": p["output_v"]}
    bias |= {"clamp": p["bulk_v"] + p["clamp_v"], "suppressor": p["bulk_v"] + p["clamp_v"]}
    resistors, capacitors, inductors = [], [], []
    for name, a, b, rest in netlist.elements:
        kind = name[0]
        if kind == "R":
            resistors.append((a, b, value(rest, p)))
        elif kind == "C":
            law = re.search(r"Q='(.*)'", rest)
            capacitors.append((a, b, node_capacitance_f(law[1], lifted) if law else value(rest, p)))
        elif kind == "L":
            inductors.append((name, a, b, value(rest, p)))
        elif kind == "D":
            model = netlist.models[rest]
            if name == "Drect" and plateau:
                resistors.append((a, b, model["rs"] + THERMAL_V * model["n"] / p["secondary_a"]))
            else:
                capacitors.append((a, b, junction_f(model, bias[b] - bias[a])))
    return resistors, capacitors, inductors


def matrices(netlist, plateau):
    """Conductance and storage matrices of the linearised circuit, and the row of the drain node."""
    resistors, capacitors, inductors = linearised(netlist, plateau)
    # Nodes that a source holds do not move; a fully coupled secondary winding is a ratio, not an inductor.
    held = {"0", "bulk", "top", "return", "stiff", "gate"} | {"clamp"}
    nodes = sorted({n for a, b, _ in resistors + capacitors for n in (a, b)} - held - {"anode"})
    index = {node: i for i, node in enumerate(nodes)}

    def row(node):
        weights = np.zeros(len(nodes))
        if node == "anode":
            # Dots at the top of the primary and at the grounded end: the anode follows the inner node over n.
            weights[index["inner"]] = 1 / netlist.parameters["n"]
        elif node in index:
            weights[index[node]] = 1.0
        return weights

    size = len(nodes)
    primaries = [e for e in inductors if e[0] != "Lsec"]
    g, c = np.zeros((size + len(primaries),) * 2), np.zeros((size + len(primaries),) * 2)
    for a, b, ohms in resistors:
        difference = row(a) - row(b)
        g[:size, :size] += np.outer(difference, difference) / ohms
    for a, b, farads in capacitors:
        difference = row(a) - row(b)
        c[:size, :size] += np.outer(difference, difference) * farads
    for k, (_, a, b, henries) in enumerate(primaries):
        difference = row(a) - row(b)
        g[:size, size + k] += difference
        g[size + k, :size] -= difference
        c[size + k, size + k] = henries
    return g, c, index["drain"]


def poles(netlist, plateau):
    """Natural frequencies (rad/s, upper half-plane) of the linearised circuit."""
    g, c, _ = matrices(netlist, plateau)
    found = scipy.linalg.eig(-g, c, right=False)
    return [s for s in found if np.isfinite(s) and s.imag > 1e5 and s.real < 0]


def resonance_hz(netlist, plateau, near_hz):
    """Frequency at which the impedance of the drain node is real: what a small-signal analysis shows without a fit."""
    g, c, drain = matrices(netlist, plateau)
    impedance = lambda hz: np.linalg.inv(g + 2j * math.pi * hz * c)[drain, drain].imag
    return scipy.optimize.brentq(impedance, 0.97 * near_hz, 1.03 * near_hz)


def ring(netlist, plateau):
    """The least damped natural frequency whose mode is the one asked for."""
    p = netlist.parameters
    inductance = p["leakage_h"] if plateau else p["magnetising_h"] + p["leakage_h"]
    at_drain = sum(farads for a, b, farads in linearised(netlist, plateau)[1] if "drain" in (a, b))
    expected = 1 / math.sqrt(inductance * at_drain)
    s = min(poles(netlist, plateau), key=lambda s: abs(math.log(abs(s) / expected)))
    return {
        "frequency_hz": abs(s) / (2 * math.pi),
        "damped_frequency_hz": s.imag / (2 * math.pi),
        "decay_per_s": -s.real,
        "quality_factor": abs(s) / (2 * -s.real),
        "resonance_hz": resonance_hz(netlist, plateau, abs(s) / (2 * math.pi)),
    }


def total_capacitance_f(netlist, plateau):
    """Everything that the drain node moves: what hangs on the secondary counts by the square of the turns ratio."""
    total = 0.0
    for a, b, farads in linearised(netlist, plateau)[1]:
        if "drain" in (a, b):
            total += farads
        elif ({"anode", "damped"} & {a, b}) and not plateau:
            total += farads / netlist.parameters["n"] ** 2
    # The suppressor's own capacitance stands in series with its blocking diode's.
    beside = {a: farads for (a, b, farads) in linearised(netlist, plateau)[1] if b == "bulk" and a == "suppressor"}
    for farads in beside.values():
        series = next(f for a, b, f in linearised(netlist, plateau)[1] if (a, b) == ("drain", "suppressor"))
        total += series * farads / (series + farads) - series
    return total


def knee_reflected_v(netlist):
    """Reflected voltage as the secondary current dies: taken at a thirtieth of its start."""
    p, model = netlist.parameters, netlist.models["rectifier"]
    current = p["secondary_a"] / 30
    series = model["rs"] + next(value(e[3], p) for e in netlist.elements if e[0] == "Resr")
    forward = model["n"] * THERMAL_V * math.log(current / model["is"] + 1) + series * current
    return p["n"] * (p["output_v"] + forward)


def cycles(netlist, continuous):
    """Turn-ons and turn-offs at half gate, inside the record, with the mode that the gaps make."""
    p = netlist.parameters
    edges = [(t0 + (t1 - t0) / 2, v1 > v0) for (t0, v0), (t1, v1) in zip(netlist.gate, netlist.gate[1:]) if v0 != v1]
    ons, offs = [t for t, up in edges if up], [t for t, up in edges if not up]
    found = []
    for k, (on, off) in enumerate(zip(ons, offs)):
        if on < p["record_start_s"]:
            continue
        last = k + 1 == len(ons)
        end = p["record_end_s"] if last else ons[k + 1]
        skipped = round((end - on) / p["period_s"]) > 1
        mode = "continuous" if continuous else "skipped" if skipped else "discontinuous"
        found.append({"start_s": on, "turn_off_s": off, "end_s": end, "mode": "incomplete" if last else mode})
    return found


def truth(path):
    """Everything that a test compares with."""
    netlist = Netlist(path)
    p = netlist.parameters
    # The boundary of conduction: the flux that the on-time brings must be gone before the next turn-on.
    on = np.mean([c["turn_off_s"] - c["start_s"] for c in cycles(netlist, False)])
    continuous = on * p["bulk_v"] > (p["period_s"] - on) * p["reflected_v"] * 0.95
    return {
        "bulk_voltage_v": p["bulk_v"],
        "reflected_voltage_v": knee_reflected_v(netlist),
        "primary_inductance_h": p["magnetising_h"] + p["leakage_h"],
        "leakage_inductance_h": p["leakage_h"],
        "switching_period_s": p["period_s"],
        "record_start_s": p["record_start_s"],
        "record_end_s": p["record_end_s"],
        "plateau_reflected_voltage_v": p["reflected_v"],
        "relaxation": {**ring(netlist, False), "node_capacitance_f": total_capacitance_f(netlist, False)},
        "leakage": {**ring(netlist, True), "node_capacitance_f": total_capacitance_f(netlist, True)},
        "cycles": cycles(netlist, bool(continuous)),
    }


if __name__ == "__main__":
    for path in sorted(FOLDER.glob("*.cir")):
        path.with_suffix(".json").write_text(json.dumps(truth(path), indent=1) + "\n")
        print(path.with_suffix(".json"))
