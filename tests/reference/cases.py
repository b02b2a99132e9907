"""The reference's cases: all wirings, devices, loads and droppers, each a supply that someone might build."""

SILICON = {"forward_v": 0.85, "on_ohm": 0.05}
DROPPERS = {
    "mosfet": {"kind": "return-mosfet", "zener_v": 36.0, "threshold_v": 3.4, "k_a_per_v2": 1.0},
    "zener": {"kind": "return-zener", "zener_v": 43.0, "zener_ohm": 12.0},
    "return-resistor": {"kind": "return-resistor", "ohm": 70.0},
    "line-resistor": {"kind": "line-resistor", "ohm": 220.0},
}
WIRINGS = ["bridge", "full-wave", "half-wave", "doubler"]


def valve(drop_v, at_a):
    return {"perveance": at_a / drop_v**1.5}


def law(node, idle_a, at_v, exponent):
    return {"node": node, "idle_a": idle_a, "at_v": at_v, "law": exponent}


def bleeder(node, ohm):
    return {"node": node, "bleeder_ohm": ohm}


def section(farad, **more):
    return {"farad": farad, **more}


def supply(name, wiring, device, filter_, loads, *, secondary_v=350.0, source_ohm=38.0, leakage_h=0.0, hz=50.0,
           harmonics=(), dropper=None, doubler_f=None, mains_v=230.0):
    if wiring == "doubler":
        secondary_v, doubler_f = secondary_v / 2, doubler_f or [220e-6, 220e-6]
        filter_ = [{}] + filter_[1:]
    if wiring == "half-wave":
        loads = [{**load, "idle_a": load["idle_a"] / 2} if "idle_a" in load else load for load in loads]
    return {
        "name": name, "wiring": wiring, "device": device, "filter": filter_, "loads": loads,
        "secondary_v": secondary_v, "source_ohm": source_ohm, "leakage_h": leakage_h, "hz": hz,
        "harmonics": [list(h) for h in harmonics], "dropper": dropper, "doubler_f": doubler_f, "mains_v": mains_v,
    }


def cases():
    one = [section(100e-6)]
    two = [section(100e-6), section(47e-6, series_ohm=470.0)]
    choked = [section(47e-6), section(100e-6, choke_h=5.0, choke_ohm=120.0)]
    three = [
        section(100e-6, esr_ohm=0.6), section(47e-6, choke_h=5.0, choke_ohm=120.0),
        section(22e-6, series_ohm=4700.0, esr_ohm=1.5),
    ]
    choke_input = [section(47e-6, choke_h=10.0, choke_ohm=90.0), section(47e-6, series_ohm=1000.0)]
    resistor = [bleeder(0, 3000.0)]
    constant = [law(0, 0.12, 450.0, 0.0)]
    valves = [law(0, 0.16, 450.0, 1.5), bleeder(0, 220e3)]
    regulated = [law(0, 0.15, 440.0, 4.5)]
    spread = [law(0, 0.16, 450.0, 1.5), law(1, 0.02, 445.0, 1.0), bleeder(0, 220e3)]
    all_nodes = spread + [law(2, 0.008, 390.0, 1.0)]
    gz34, ez40 = valve(17.0, 0.225), {"perveance": 8.41e-4}

    out = []
    for wiring in WIRINGS:
        out.append(supply(f"{wiring}, one capacitor, resistor", wiring, SILICON, one, resistor))
        out.append(supply(f"{wiring}, one capacitor, valves", wiring, SILICON, one, valves))
        out.append(supply(f"{wiring}, valve rectifier, constant current", wiring, gz34, one, constant))
        out.append(supply(f"{wiring}, valve rectifier, choke", wiring, ez40, choked, spread, source_ohm=150.0))
        out.append(supply(f"{wiring}, three nodes", wiring, SILICON, three, all_nodes))
        out.append(supply(f"{wiring}, leakage", wiring, SILICON, two, spread, leakage_h=6e-3))
        out.append(supply(f"{wiring}, bleeder alone", wiring, SILICON, one, [bleeder(0, 100e3)]))
        out.append(supply(f"{wiring}, flat-topped mains", wiring, SILICON, one, regulated,
                          harmonics=[(3, 0.02), (5, -0.02)]))
    for wiring in WIRINGS:
        for name, dropper in DROPPERS.items():
            out.append(supply(f"{wiring}, {name}", wiring, SILICON, two, spread, dropper=dropper))
        for name in ["mosfet", "zener", "return-resistor"]:
            out.append(supply(f"{wiring}, valve rectifier, {name}", wiring, gz34, one, valves, dropper=DROPPERS[name]))
        for name in ["mosfet", "return-resistor", "line-resistor"]:
            out.append(supply(f"{wiring}, three nodes, {name}", wiring, SILICON, three, all_nodes,
                              dropper=DROPPERS[name], mains_v=247.0))
        for name in ["zener", "line-resistor"]:
            out.append(supply(f"{wiring}, choke, leakage, {name}", wiring, SILICON, choked, spread,
                              dropper=DROPPERS[name], leakage_h=3e-3, hz=60.0))
        out.append(supply(f"{wiring}, heavy source, zener", wiring, SILICON, one, regulated, source_ohm=220.0,
                          dropper=DROPPERS["zener"]))
        out.append(supply(f"{wiring}, light load, line-resistor", wiring, SILICON, two,
                          [law(1, 0.015, 480.0, 1.0), bleeder(0, 330e3)], dropper=DROPPERS["line-resistor"]))
    for wiring in ["bridge", "full-wave"]:
        lower = [law(0, 0.12, 300.0, 1.5), law(1, 0.03, 280.0, 1.0)]
        out.append(supply(f"{wiring}, choke input", wiring, SILICON, choke_input, lower))
        out.append(supply(f"{wiring}, choke input, leakage", wiring, SILICON, choke_input, lower, leakage_h=6e-3))
        out.append(supply(f"{wiring}, choke input, valve rectifier", wiring, gz34, choke_input, lower))
        out.append(supply(f"{wiring}, choke input below critical", wiring, SILICON, choke_input,
                          [bleeder(0, 12e3)]))
        out.append(supply(f"{wiring}, choke input, mosfet", wiring, SILICON, choke_input, lower,
                          dropper=DROPPERS["mosfet"], leakage_h=2e-3))
        out.append(supply(f"{wiring}, choke input, line-resistor", wiring, SILICON, choke_input, lower,
                          dropper=DROPPERS["line-resistor"]))
    out.append(supply("bridge, even harmonics", "bridge", SILICON, two, spread,
                      harmonics=[(2, 0.01), (3, 0.01), (5, -0.02)]))
    out.append(supply("full-wave, even harmonics, valve rectifier", "full-wave", ez40, one, constant,
                      source_ohm=200.0, harmonics=[(2, -0.015), (3, 0.01)]))
    out.append(supply("doubler, unequal capacitors", "doubler", SILICON, two, spread, doubler_f=[220e-6, 100e-6]))
    out.append(supply("half-wave, choke input", "half-wave", SILICON, [section(100e-6, choke_h=4.0, choke_ohm=60.0)],
                      [bleeder(0, 1500.0)]))
    out.append(supply("bridge, resistor input", "bridge", SILICON, [section(47e-6, series_ohm=120.0)], valves))
    return out
