"""Join finished fits to a bundle."""

import json
import shutil
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from emu.bundle import FORMAT, open_bundle
from emu.errors import UserError
from training.files import digest, write_atomically

__all__ = ["publish"]


def publish(runs: Sequence[Path], out: Path) -> Path:
    """Write a bundle.

    Args:
        runs: folders of finished fits of one campaign: estimators, at most one a family, and at most one
            classifier. Where a folder holds ``checks.json``, it becomes part of the manifest.
        out: folder that does not exist yet.

    Returns:
        The folder.

    Raises:
        UserError: a fit is not finished or damaged, the fits do not belong together, or the folder exists.
    """
    if out.exists():
        raise UserError(f"{out}: exists already; give another --out, or delete it")
    records = {run: _record(run) for run in runs}
    _check_together(records)
    partial = out.with_name(f".{out.name}.partial")
    shutil.rmtree(partial, ignore_errors=True)
    partial.mkdir(parents=True)
    manifest: dict[str, Any] = {"format": FORMAT, "campaign": next(iter(records.values()))["campaign"]}
    manifest |= {"estimators": {}, "classifier": None}
    for run, record in records.items():
        name = record.get("family", "classifier")
        entry = {"file": f"{name}.safetensors"} | {k: v for k, v in record.items() if k != "campaign"}
        shutil.copyfile(run / f"{record['kind']}.safetensors", partial / entry["file"])
        if record["kind"] == "classifier":
            manifest["classifier"] = entry
        else:
            manifest["estimators"][name] = entry | {"checks": _checks(run)}
    write_atomically(partial / "manifest.json", (json.dumps(manifest, indent=1) + "\n").encode())
    sums = "".join(f"{digest(file)}  {file.name}\n" for file in sorted(partial.iterdir()))
    write_atomically(partial / "SHA256SUMS", sums.encode())
    open_bundle(partial)
    partial.rename(out)
    return out


def _record(run: Path) -> dict[str, Any]:
    """Read the record of a fit and see that its weights are those it speaks of."""
    try:
        record: dict[str, Any] = json.loads((run / "fit.json").read_text(encoding="utf-8"))
        said = digest(run / f"{record['kind']}.safetensors")
    except (OSError, ValueError, KeyError) as problem:
        raise UserError(f"{run}: no finished fit; run the same emu-train fit again") from problem
    if said != record["sha256"]:
        raise UserError(f"{run}: the weights are not those of its record; delete the folder and fit again")
    return record


def _checks(run: Path) -> Any:
    """Read what the checks of an estimator found; None where it was not checked."""
    report = run / "checks.json"
    return json.loads(report.read_text(encoding="utf-8")) if report.exists() else None


def _check_together(records: dict[Path, dict[str, Any]]) -> None:
    """Refuse fits of different campaigns, two of one family, two classifiers, or no estimator."""
    if not any(record["kind"] == "estimator" for record in records.values()):
        raise UserError("a bundle needs at least one estimator; name the folders of finished fits")
    first, *others = records
    for run in others:
        if records[run]["campaign"] != records[first]["campaign"]:
            raise UserError(f"{run}: fitted for another campaign than {first}; a bundle has one campaign")
    names: dict[str, Path] = {}
    for run, record in records.items():
        name = record.get("family", "the classifier")
        if name in names:
            raise UserError(f"{run}: {name} is there already, from {names[name]}; name one of them")
        names[name] = run
