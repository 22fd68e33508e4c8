"""Compile every variant of the kernels once: `python -m carriersim.engine.warmup`.

Several processes that compile the same function for the first time race on the cache files, so
whoever starts many processes runs this first.
"""

from carriersim.engine.problem import build
from carriersim.engine.solve import compile_for
from carriersim.scenario import read_text

VARIANTS = {
    "constant": "{channel: {length_nm: 1}, contacts: {bias_mV: 1, temperature_K: 1}}",
    "tables": """
channel: {length_nm: 1, modes: {energy_meV: [0, 1], value: [1, 2]}}
contacts: {bias_mV: 1, temperature_K: 1}
""",
}


def main():
    """Compile all variants."""
    for name, text in VARIANTS.items():
        compile_for(build(read_text(text, f"variant {name}")))


if __name__ == "__main__":
    main()
