"""The first page: tables, figures, cautions, provenance and methods in one file, offline."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import jinja2

from flyoff.registry import citation, discover
from flyoff.report.views import CAUTIONS, views
from flyoff.study.run import Study

__all__ = ["page"]

_CAPTIONS = {
    "errors": "Error of run 0 within the filter's own three sigma",
    "nees": "Normalised NEES over time, with the band of a consistent filter",
    "accuracy-cost": "Accuracy against amortised time",
}


def page(study: Study, figures: Sequence[Path]) -> str:
    """The page as HTML; every string is escaped, figures are embedded."""
    loader = jinja2.FileSystemLoader(Path(__file__).parent)
    environment = jinja2.Environment(
        loader=loader, autoescape=True, undefined=jinja2.StrictUndefined
    )
    text: str = environment.get_template("page.html").render(
        experiment=study.experiment.name,
        purpose=study.experiment.purpose,
        cautions=CAUTIONS,
        views=list(views(study)),
        names=("window", "estimator"),
        figures=[_figure(f) for f in figures],
        expected=[
            {"problem": p.name, "claim": e.claim, "source": e.source}
            for p in study.experiment.problems
            for e in p.problem.expected
        ],
        provenance=_provenance(study.manifest),
        folder=f"results/{study.experiment.name}",
        methods=_methods(study),
    )
    return text


def _figure(file: Path) -> dict[str, str]:
    what = next((w for w in _CAPTIONS if file.stem.startswith(w + "-")), "")
    condition = file.stem[len(what) + 1 :]
    return {
        "caption": f"{_CAPTIONS.get(what, file.stem)}: {condition}",
        "data": base64.b64encode(file.read_bytes()).decode(),
    }


def _provenance(manifest: Any) -> list[tuple[str, str]]:
    out = [(key, str(manifest[key])) for key in ("flyoff", "date", "seed", "config", "source")]
    return out + [(key, str(value)) for key, value in manifest["environment"].items()]


def _methods(study: Study) -> list[dict[str, str]]:
    """Publications of what this study used, each once."""
    used: list[tuple[str, str]] = []
    for kind, things in (
        ("problem", [p.problem for p in study.experiment.problems]),
        ("estimator", [e.what for e in study.experiment.estimators]),
        ("point-rule", [getattr(e.what, "points", None) for e in study.experiment.estimators]),
    ):
        known = {cls: name for name, cls in discover(kind).items()}
        used += [(kind, known[type(t)]) for t in things if type(t) in known]
    used += [("score", name) for name in discover("score")]
    found = [{"name": name, "cites": citation(kind, name)} for kind, name in dict.fromkeys(used)]
    return [m for m in found if m["cites"]]
