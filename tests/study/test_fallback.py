"""Where the compiled sampler is missing, plain PyMC samples the same posterior."""

import pandas as pd
import pytest
from helpers.small_studies import SOUND_TABLE, sound_study

from remnantstats import study as pipeline
from remnantstats.inference import engine, nuts

#: twenty copies of six stars: a posterior that both samplers find in seconds
HEADER, *ROWS = SOUND_TABLE.splitlines()
TABLE = "\n".join([HEADER, *[row.replace("WD-", f"WD-{copy}-") for copy in range(20) for row in ROWS]]) + "\n"


@pytest.mark.slow
def test_plain_pymc_serves_where_the_compiled_sampler_is_missing(tmp_path, monkeypatch):
    study = sound_study(tmp_path, table=TABLE)
    compiled = pipeline.infer_study(study, out=tmp_path / "compiled").fit
    monkeypatch.setattr(nuts, "find_spec", lambda name: None)
    monkeypatch.setattr(engine, "_FIRST", 500)
    plain = pipeline.infer_study(study, out=tmp_path / "plain").fit
    assert compiled.posterior.attrs["sampler"] == "nutpie"
    assert plain.posterior.attrs["sampler"] == "PyMC"
    assert {"diverging", "energy", "n_steps"} <= set(plain.posterior["sample_stats"].data_vars)
    assert plain.posterior["posterior"].sizes["chain"] == nuts.CHAINS
    # the sampler's own checks; copied stars are not like the model's, which another check rightly says
    assert {check.verdict for check in plain.checks[:4]} == {"pass"}, [check.message for check in plain.checks]
    one, two = (fit.summary().set_index("quantity") for fit in (compiled, plain))
    pd.testing.assert_index_equal(one.index, two.index)
    moves = one["sd"] > 0
    assert ((one["mean"] - two["mean"]).abs() < 0.25 * one["sd"])[moves].all()
    assert ((two["sd"] / one["sd"] - 1).abs() < 0.2)[moves].all()
