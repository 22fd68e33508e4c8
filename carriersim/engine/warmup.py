"""Compile every variant of the kernels once: `python -m carriersim.engine.warmup`.

Several processes that compile the same function for the first time race on the cache files, so
whoever starts many processes runs this first. It uses two itself, which share next to nothing.
"""

from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

CONSTANT = "channel: {{length_nm: 1{}}}\ncontacts: {{bias_mV: 1, temperature_K: 1}}\n"
TABLES = "{energy_meV: [0, 1], value: [1, 2]}"
PATH = f"scattering: {{mean_free_path_nm: {TABLES}}}\n"
SPHERE = ", dimension: 3"
RIBBON = ", dimension: 2, width_nm: 1, specularity: 0"
WIRE = ", dimension: 3, width_nm: 1, height_nm: 1, specularity: 0"
ELASTIC = (
    CONSTANT.format(""),
    CONSTANT.format(f", modes: {TABLES}"),
    CONSTANT.format(SPHERE),
    CONSTANT.format(SPHERE) + "scattering: {mean_free_path_nm: 1}\n",
    CONSTANT.format(RIBBON) + "scattering: {mean_free_path_nm: 1}\n",
    CONSTANT.format(WIRE) + "scattering: {mean_free_path_nm: 1}\n",
    CONSTANT.format(SPHERE) + PATH,
)
BATH = "{kind: bath, path_nm: 1, direction: kept}"
RANDOM = "{kind: bath, path_nm: 1, direction: randomised}"
PHONON = "{kind: optical_phonon, path_nm: 1, energy_meV: 1}"
# Mechanism, bias, path, and more of the channel: from the reference, and about a trial occupation.
FROM_REFERENCE = ((BATH, 1, "1", ""), (RANDOM, 1, "1", SPHERE))
FROM_TRIAL = (
    (PHONON, 1, "1", ""),
    (BATH, 1, TABLES, ""),
    (BATH, 0, TABLES, ""),
    (PHONON, 1, "1", SPHERE),
)


def main():
    """Compile all variants."""
    with ProcessPoolExecutor(2, mp_context=get_context("spawn")) as pool:
        done = [pool.submit(_without_trial), pool.submit(_with_trial)]
        for one in done:
            one.result()


def _without_trial():
    for variant in FROM_REFERENCE:
        _relaxing(*variant)
    for text in ELASTIC:
        _elastic(text)


def _with_trial():
    for variant in FROM_TRIAL:
        _relaxing(*variant)


def _elastic(text):
    from carriersim.engine import endless
    from carriersim.engine.problem import build
    from carriersim.engine.solve import compile_for
    from carriersim.scenario import read_text

    problem = build(read_text(text, "variant"))
    compile_for(problem)
    if problem.space is not None:
        endless.compile_for(problem)


def _relaxing(mechanism, bias, path, channel):
    from carriersim.engine import rounds
    from carriersim.engine.deviation import deviation_of
    from carriersim.engine.problem import build
    from carriersim.engine.solve import StopRequest
    from carriersim.scenario import read_text

    text = f"""
channel: {{length_nm: 1{channel}}}
contacts: {{bias_mV: {bias}, temperature_K: 1}}
scattering: {{backscatter_path_nm: {path}}}
relaxation: {{mechanisms: [{mechanism}]}}
simulation: {{cells: 1, energy_bins: 10, batches: 8}}
"""
    problem = build(read_text(text, "relaxing variant"))
    rounds.compile_for(rounds.Rounds(problem, 1, StopRequest(), deviation_of(problem)))


if __name__ == "__main__":
    main()
