"""The files printed in docs/direct_detection.md are files that the terms read."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

from scanfit.contracts import BuildContext
from scanfit.likelihoods.direct_detection.detector import Efficiency
from scanfit.likelihoods.direct_detection.experiment import BackgroundUncertainty, Experiment
from scanfit.likelihoods.direct_detection.limit_term import DirectDetectionLimit
from scanfit.likelihoods.direct_detection.published_limit import PublishedLimit
from scanfit.likelihoods.direct_detection.term import DirectDetection
from scanfit.validation import key_names

PAGE = Path(__file__).parents[2] / "docs" / "direct_detection.md"


def test_printed_files_are_read_and_every_key_is_named(tmp_path: Path) -> None:
    text = PAGE.read_text(encoding="utf-8")
    experiment, formula, curve, _ = re.findall(r"```toml\n(.*?)```", text, re.DOTALL)
    (tmp_path / "experiment.toml").write_text(experiment, encoding="utf-8")
    (tmp_path / "curve.toml").write_text(curve, encoding="utf-8")
    built = DirectDetection(DirectDetection.Options(data="experiment.toml"), BuildContext(tmp_path))
    assert built.experiment.bins is not None
    DirectDetectionLimit(DirectDetectionLimit.Options(data="curve.toml"), BuildContext(tmp_path))
    Efficiency.model_validate(tomllib.loads(formula)["efficiency"])
    for schema in (Efficiency, Experiment, PublishedLimit, BackgroundUncertainty):
        missing = [key for key in key_names(schema) if key not in text]
        assert not missing, missing
    assert set(tomllib.loads(experiment)) - {"title"}


def test_run_file_keys_are_named() -> None:
    text = PAGE.read_text(encoding="utf-8")
    for key in key_names(DirectDetection.Options):
        assert key in text or key == "data"
