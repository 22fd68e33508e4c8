"""Compile every variant of the kernels once: `python -m carriersim.engine.warmup`.

Several processes that compile the same function for the first time race on the cache files, so
whoever starts many processes runs this first.
"""

from carriersim.engine import rounds
from carriersim.engine.deviation import deviation_of
from carriersim.engine.problem import build
from carriersim.engine.solve import StopRequest, compile_for
from carriersim.scenario import read_text

VARIANTS = {
    "constant": "{channel: {length_nm: 1}, contacts: {bias_mV: 1, temperature_K: 1}}",
    "tables": """
channel: {length_nm: 1, modes: {energy_meV: [0, 1], value: [1, 2]}}
contacts: {bias_mV: 1, temperature_K: 1}
""",
    "directions": """
channel: {length_nm: 1, dimension: 3}
contacts: {bias_mV: 1, temperature_K: 1}
""",
    "directions, one pair of walls": """
channel: {length_nm: 1, dimension: 2, width_nm: 1, specularity: 0}
contacts: {bias_mV: 1, temperature_K: 1}
""",
    "directions, two pairs of walls": """
channel: {length_nm: 1, dimension: 3, width_nm: 1, height_nm: 1, specularity: 0}
contacts: {bias_mV: 1, temperature_K: 1}
""",
    "directions, tables": """
channel: {length_nm: 1, dimension: 3}
contacts: {bias_mV: 1, temperature_K: 1}
scattering: {mean_free_path_nm: {energy_meV: [0, 1], value: [1, 2]}}
""",
}
# With relaxation: from the reference and about a trial occupation, without and with tables.
WALLED = ", dimension: 2, width_nm: 1, specularity: 0"
RELAXING = (
    ("{kind: bath, path_nm: 1, direction: kept}", 1, "1"),
    ("{kind: bath, path_nm: 1, direction: kept}", 0, "{energy_meV: [0, 1], value: [1, 2]}"),
    ("{kind: optical_phonon, path_nm: 1, energy_meV: 1}", 1, "1"),
    ("{kind: bath, path_nm: 1, direction: kept}", 1, "{energy_meV: [0, 1], value: [1, 2]}"),
    ("{kind: bath, path_nm: 1, direction: kept}", 1, "1", ", dimension: 3"),
    ("{kind: bath, path_nm: 1, direction: kept}", 1, "1", WALLED),
    ("{kind: optical_phonon, path_nm: 1, energy_meV: 1}", 1, "1", ", dimension: 3"),
    ("{kind: optical_phonon, path_nm: 1, energy_meV: 1}", 1, "1", WALLED),
)


def main():
    """Compile all variants."""
    for name, text in VARIANTS.items():
        compile_for(build(read_text(text, f"variant {name}")))
    for number, variant in enumerate(RELAXING):
        problem = build(read_text(_relaxing(*variant), f"relaxing variant {number}"))
        deviation = deviation_of(problem)
        rounds.compile_for(rounds.Rounds(problem, 1, StopRequest(), deviation))


def _relaxing(mechanism, bias, path, channel=""):
    return f"""
channel: {{length_nm: 1{channel}}}
contacts: {{bias_mV: {bias}, temperature_K: 1}}
scattering: {{backscatter_path_nm: {path}}}
relaxation: {{mechanisms: [{mechanism}]}}
simulation: {{cells: 1, energy_bins: 10, batches: 8}}
"""


if __name__ == "__main__":
    main()
