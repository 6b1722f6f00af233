"""Small studies on disk, for the tests that go through files and the command line."""

from pathlib import Path

from remnantstats.api import simulate_sample
from remnantstats.calibration import write_survey

#: six stars without a fault
SOUND_TABLE = """\
star,survey,inclusion,atmosphere,cooling_age,pollution,log_accretion,log_accretion_err,log_accretion_limit
WD-1,deep,blind,H,0.5,detected,8.2,0.15,7.0
WD-2,deep,blind,H,0.4,detected,7.6,0.15,7.1
WD-3,wide,blind,H,0.9,limit,,,8.0
WD-4,wide,blind,H,0.3,limit,,,8.2
WD-5,deep,blind,H,0.7,limit,,,6.9
WD-6,wide,blind,H,0.6,unobserved,,,
"""

MISSION = """
[mission]
success = [0.9, 0.95]
completeness = 0.6
max_targets = 200
density = 0.01
planet_separation = 1.0
wavelength = 0.8
inner_working_angle = 3.0
"""

TRANSFER = """
[transfer]
retention = { family = "beta", alpha = 8, beta = 2, basis = "invented: retention" }
delivery = { family = "beta", alpha = 6, beta = 3, basis = "invented: delivery" }
prior = { family = "beta", alpha = 1, beta = 1, basis = "invented: uniform" }
earthlike = { family = "fixed", value = 0.5, basis = "invented: half" }
"""


def study_text(table="sample.csv", model='name = "steady"', pollution="", more="", seed=5):
    """A study file whose parts can be replaced by faulty ones."""
    return (
        f'title = "A small study"\nseed = {seed}\n\n[sample]\ntable = "{table}"\n\n[model]\n{model}\n\n'
        f"[pollution]\n{pollution}\n{more}"
    )


def sound_study(folder: Path, text: str | None = None, table: str | bytes = SOUND_TABLE) -> Path:
    """Write a study of six stars; return its path."""
    folder.mkdir(parents=True, exist_ok=True)
    content = table if isinstance(table, bytes) else table.encode()
    (folder / "sample.csv").write_bytes(content)
    path = folder / "study.toml"
    path.write_text(study_text() if text is None else text, encoding="utf-8")
    return path


def drawn_study(folder: Path, stars: int = 150, more: str = TRANSFER + MISSION, seed: int = 5) -> Path:
    """Write a study of synthetic stars of the steady model; return its path."""
    folder.mkdir(parents=True, exist_ok=True)
    survey = simulate_sample(
        "steady", stars, seed=11, debris_fraction=0.45, mean_log_accretion=7.8, sd_log_accretion=0.8
    )
    write_survey(survey, folder)
    path = folder / "study.toml"
    path.write_text(study_text(table="sample.ecsv", more=more, seed=seed), encoding="utf-8")
    return path
