"""Writes reports/review.md from the lines of the part "review"."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from tests.calibration import lines
from tests.calibration import review as r
from tests.calibration.summarise import table
from tests.calibration.words_of_review import WORDS

Design = tuple[Any, ...]


def _summed(rows: Sequence[Mapping[str, Any]], what: str, *names: str) -> dict[Design, list[Any]]:
    """Results of the blocks of each design, by the values of ``names``."""
    by: dict[Design, list[Any]] = defaultdict(list)
    for row in rows:
        if row["key"]["what"] == what:
            by[tuple(row["key"][name] for name in names)].append(row["result"])
    return by


def _share(count: float, n: int) -> str:
    return f"{count / n:.3f}" if n else "-"


def _total(blocks: Sequence[Any], name: str) -> np.ndarray:
    return np.sum([block[name] for block in blocks], axis=0)


def _promise(rows: Sequence[Mapping[str, Any]], side: int, names: Sequence[str]) -> str:
    """One line a design; ``side`` 0: wrongly proposed, 1: rightly."""
    body = []
    for (kind, p, rate), blocks in _summed(rows, "promise", "kind", "promise", "rate").items():
        n = len(blocks) * r.BLOCK
        cells = [_share(_total(blocks, name)[side], n) for name in names]
        body.append([kind, f"{p:g}", str(rate), str(n), *cells])
    heads = {"naive": "5 % test every quarter", "works": "e-process"}
    heads["works, naive"] = heads["naive"]
    if "naive" in names:
        heads["keep 1.0"] = "e-process"
    head = ["triggers", "promise", "a quarter", "worlds"]
    return table([*head, *(heads.get(name, name) for name in names)], body)


def _estimated(rows: Sequence[Mapping[str, Any]]) -> str:
    body = []
    for (p, holdout), blocks in _summed(rows, "estimated", "precision", "holdout").items():
        n = len(blocks) * r.BLOCK
        cells = [_share(float(_total(blocks, f"keep {keep}")), n) for keep in r.KEEPS]
        body.append([f"{p:g}", str(holdout), str(n), *cells])
    head = ["precision", "triggers the promise rests on", "worlds"]
    return table([*head, *(f"keep {keep}" for keep in r.KEEPS)], body)


def _fitted(rows: Sequence[Mapping[str, Any]]) -> str:
    body = []
    for (rate,), blocks in _summed(rows, "fitted", "rate").items():
        n = len(blocks) * r.BLOCK
        nothing, something = _total(blocks, "nothing"), _total(blocks, "something")
        cells = [_share(nothing[0], n), _share(something[1], n)]
        body.append([str(rate), str(n), *cells])
    return table(["a quarter", "rules", "says nothing, within 20", "odds x 3, within 8"], body)


def _hang(rows: Sequence[Mapping[str, Any]]) -> str:
    hows = r.HANG_TOGETHER
    body = []
    designs = _summed(rows, "hang", "kind", "promise", "rate", "horizon")
    for (kind, p, rate, horizon), blocks in designs.items():
        n = len(blocks) * r.BLOCK
        sums = {how: _total(blocks, how) for how in hows}
        cells = [f"{sums[how][0] / n:.3f} / {sums[how][1] / n:.2f}" for how in hows]
        body.append([kind, f"{p:g}", str(rate), str(horizon), str(n), *cells])
    return table(["triggers", "promise", "a quarter", "horizon", "worlds", *hows], body)


def _late(rows: Sequence[Mapping[str, Any]]) -> str:
    body = []
    for (p, since, before), blocks in _summed(rows, "late", "promise", "since", "before").items():
        n = len(blocks) * r.BLOCK
        cells = [_share(float(_total(blocks, str(k))), n) for k in r.RESTARTS]
        body.append([f"{p:g}", str(since), f"{before:g}", str(n), *cells])
    restarts = ["none" if k == 0 else f"every {k}" for k in r.RESTARTS]
    return table(
        ["promise", "quarters before", "precision / promise then", "worlds", *restarts], body
    )


def _cover(rows: Sequence[Mapping[str, Any]]) -> str:
    body = []
    for (kind, p), blocks in _summed(rows, "cover", "kind", "promise").items():
        n = len(blocks) * r.BLOCK
        width = float(np.mean([block["width"] for block in blocks]))
        missed = _share(float(_total(blocks, "missed")), n)
        body.append([kind, f"{p:g}", str(n), missed, f"{width:.3f}"])
    return table(["triggers", "precision", "worlds", "ever missed", "width after 20"], body)


def _online(rows: Sequence[Mapping[str, Any]]) -> str:
    body = []
    for (kind,), blocks in _summed(rows, "online", "kind").items():
        n = len(blocks) * r.BLOCK
        cells = []
        for name in r.PROCEDURES:
            false, found, true = _total(blocks, name)
            power = f" / {found / true:.2f}" if true else ""
            cells.append(f"{false / n:.4f}{power}")
        body.append([kind, str(n), *cells])
    return table(["new rules", "worlds", *r.PROCEDURES], body)


def _moved(rows: Sequence[Mapping[str, Any]]) -> str:
    body = []
    designs = _summed(rows, "moved", "series", "ratio")
    for series in dict.fromkeys(key[0] for key in designs):
        cells = []
        for ratio in r.RATIOS:
            blocks = designs[series, ratio]
            p = np.concatenate([block["p"] for block in blocks])
            if ratio == 1.0:
                cells += [str(p.size), f"{(p <= 0.05).mean():.3f}", f"{(p <= 0.01).mean():.4f}"]
            else:
                near = float(_total(blocks, "near")[0]) / p.size
                cells.append(f"{(p <= 0.05).mean():.2f} ({near:.2f})")
        body.append([series, *cells])
    head = ["weekly counts", "series", "false alarms at .05", "at .01"]
    return table([*head, "halved", "down 30 %", "up 30 %"], body)


def write_review(folder: Path, reports: Path) -> None:
    """Read the lines of the part, write review.md."""
    rows = lines.read(folder / "review.jsonl")
    keeps = [f"keep {k}" for k in r.KEEPS]
    tables = {
        "level": _promise(rows, 0, ["keep 1.0", "no restarts", "naive"]),
        "power": _promise(rows, 1, ["keep 1.0", "no restarts", "naive"]),
        "keep_level": _promise(rows, 0, keeps),
        "keep_power": _promise(rows, 1, keeps),
        "works_level": _promise(rows, 0, ["works", "works, naive"]),
        "works_power": _promise(rows, 1, ["works", "works, naive"]),
        "fitted": _fitted(rows),
        "estimated": _estimated(rows),
        "hang": _hang(rows),
        "late": _late(rows),
        "cover": _cover(rows),
        "online": _online(rows),
        "moved": _moved(rows),
    }
    (reports / "review.md").write_text(WORDS.format(**tables), encoding="utf-8")
