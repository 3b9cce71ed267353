"""The simulator's own way from an impedance to the quantities that a meter or a table shows.

Written apart from the product's: it checks it, so it must not share it.
"""

import math

SERIES_BELOW_OHM = 1000.0  # common practice: series model for low |Z|, parallel for high


def views_of(z: complex, frequency_hz: float) -> dict[str, float]:
    """Every quantity of Z = R + jX in SI units; those that Z does not have are left out."""
    w = 2 * math.pi * frequency_hz
    r, x = z.real, z.imag
    y = 1 / z if z else complex(math.inf)
    found = {
        "resistance_ohm": r,
        "reactance_ohm": x,
        "impedance_ohm": abs(z),
        "phase_rad": math.atan2(x, r),
        "rs_ohm": r,
    }
    if y.real:
        found["rp_ohm"] = 1 / y.real
    if x:
        found["d"] = r / abs(x)
        found["cs_f"], found["ls_h"] = 1 / (-x * w), x / w
        found["cp_f"], found["lp_h"] = y.imag / w, 1 / (-y.imag * w)
        model = "s" if abs(z) < SERIES_BELOW_OHM else "p"
        found["capacitance_f"] = found[f"c{model}_f"]
        found["inductance_h"] = found[f"l{model}_h"]
    if r:
        found["q"] = abs(x) / r
    return found
