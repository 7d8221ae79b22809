"""The built-in demonstration: simulate, run a whole study, say what was found."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from learnclosure.atomic import atomic_path
from learnclosure.errors import InputError
from learnclosure.study import read_study
from learnclosure.workflow import (
    Progress,
    artefacts,
    failed_checks,
    read_json,
    run_study,
    silent,
)


def demo_study(regions: Mapping[str, str]) -> str:
    """Write the demonstration's study file.

    Parameters
    ----------
    regions : mapping of str to {"train", "test"}
        Regions and their split.

    Returns
    -------
    str
        A TOML document.
    """
    tables = [
        f'[[ensemble]]\nname = "{name}"\nsplit = "{split}"\nfiles = "ensembles/{name}/*.nc"\n'
        for name, split in regions.items()
    ]
    return 'output = "results"\n\n' + "\n".join(tables)


def _choose_regimes(names: Sequence[str]) -> list[Any]:
    from learnclosure.simulate.regimes import DEMO_REGIMES

    known = {regime.name: regime for regime in DEMO_REGIMES}
    for name in names:
        if name not in known:
            raise InputError(
                "unknown channel region",
                where="--region",
                found=name,
                expected=f"one of {', '.join(known)}",
                remedy="choose one of them or leave the option out for all",
            )
    return [known[name] for name in names] if names else list(DEMO_REGIMES)


def simulate_kind(
    folder: Path,
    kind: str,
    *,
    regions: Sequence[str] = (),
    members: int = 12,
    snapshots: int = 40,
    spacing_days: float = 5.0,
    fluxes: bool = False,
    seed: int = 0,
    workers: int = 2,
    progress: Progress = silent,
) -> list[Path]:
    """Write built-in ensembles of one kind.

    Parameters
    ----------
    folder : Path
        Where a folder for each region is made.
    kind : {"channel", "spinning", "plane-wave"}
    regions : sequence of str, optional
        Channel regions; all if empty.
    members, snapshots, seed : int, optional
    spacing_days : float, optional, days
        Between snapshots of the channel.
    fluxes : bool, optional
        Whether the channel's files hold means and total tracer fluxes between snapshots.
    workers : int, optional
        Channel regions simulated at once.
    progress : callable, optional
        Called with ``(task, share done, note)``.

    Returns
    -------
    list of Path
        The folders written.

    Raises
    ------
    InputError
        If a region is unknown or the folder cannot be written.
    SimulationError
        If a channel ensemble loses numerical stability.
    """
    from learnclosure.simulate import exact
    from learnclosure.simulate.channel import simulate_regions

    if kind == "channel":
        return simulate_regions(
            _choose_regimes(regions),
            folder,
            members=members,
            snapshots=snapshots,
            spacing_days=spacing_days,
            fluxes=fluxes,
            seed=seed,
            workers=workers,
            progress=lambda name, share, note: progress(f"simulate {name}", share, note),
        )
    if fluxes:
        raise InputError(
            f"a {kind} ensemble has no fluxes summed over its steps",
            where="--fluxes",
            remedy="leave the option out",
        )
    if regions:
        raise InputError(
            f"a {kind} ensemble has no regions", where="--region", remedy="leave the option out"
        )
    target = folder / kind
    if kind == "spinning":
        exact.simulate_spinning(target, members=members, snapshots=snapshots, seed=seed)
    else:
        exact.simulate_plane_wave(target, members=members, snapshots=snapshots)
    progress(f"simulate {kind}", 1.0, "done")
    return [target]


def _pair(values: Sequence[float | None] | None) -> str:
    if values is None:
        return "not available"
    return " / ".join("-" if value is None else f"{value:.2f}" for value in values)


def findings(evaluation: Mapping[str, Any], held_out: str) -> list[str]:
    """Say what the demonstration found on the held-out region, line by line.

    Parameters
    ----------
    evaluation : mapping
        Contents of ``evaluation.json``.
    held_out : str
        Name of the held-out region.

    Returns
    -------
    list of str
    """
    lines = [f"flux R2 on the held-out region {held_out}, upper / lower layer:"]
    ceiling = (evaluation["ceiling"] or {}).get(held_out)
    for family, record in evaluation["families"].items():
        scores = record["regions"][held_out]["scores"]["flux_r2"]
        chosen = record["chosen"]
        rivals = {
            name: baseline["regions"][held_out]["scores"]["flux_r2"]
            for name, baseline in evaluation["baselines"].items()
            if baseline["family"] == family
        }
        above = all(
            all(own > other for own, other in zip(scores, theirs, strict=True))
            for theirs in rivals.values()
        )
        best = max(rivals, key=lambda name: sum(rivals[name])) if rivals else None
        verdict = "above every baseline" if above else "NOT above every baseline"
        text = f"  {family} ({chosen['regressor']}, {chosen['target']}): {_pair(scores)}"
        if best is not None:
            text += f"; {verdict}, best of them {best} {_pair(rivals[best])}"
        lines.append(text)
    independent = None if ceiling is None else ceiling["flux_r2"]
    lines.append(f"  tensor from an independent half of the members: {_pair(independent)}")
    return lines


def run_demo(folder: Path, *, progress: Progress = silent, workers: int = 2) -> list[str]:
    """Simulate the built-in channel regions and run a whole study on them.

    Parameters
    ----------
    folder : Path
        Where ensembles, study and results go; what stands there is used again.
    progress : callable, optional
        Called with ``(task, share done, note)``.
    workers : int, optional
        Regions worked on at once.

    Returns
    -------
    list of str
        About ten lines: what was found and where report and bundles lie.

    Raises
    ------
    LearnclosureError
        If a stage cannot be carried out.
    """
    from learnclosure.simulate.regimes import DEMO_REGIMES, HELD_OUT

    simulate_kind(folder / "ensembles", "channel", workers=workers, progress=progress)
    splits = {
        regime.name: "test" if regime.name == HELD_OUT else "train" for regime in DEMO_REGIMES
    }
    study_file = folder / "study.toml"
    text = demo_study(splits)
    if not study_file.is_file() or study_file.read_text(encoding="utf-8") != text:
        with atomic_path(study_file) as temporary:
            temporary.write_text(text, encoding="utf-8")
    study = read_study(study_file)
    run_study(study, progress=progress, workers=workers)
    places = artefacts(study)
    evaluation = read_json(places.evaluation, "run the demonstration again")
    failed = failed_checks(evaluation)
    checks = sum(len(checks) for checks in evaluation["audit"].values())
    trained = [name for name, split in splits.items() if split == "train"]
    return [
        f"trained on {', '.join(trained)}; held out: {HELD_OUT}",
        *findings(evaluation, HELD_OUT),
        f"audit: {checks - len(failed)} of {checks} checks passed"
        + (f"; failed: {', '.join(failed)}" if failed else ""),
        f"study:   {study_file}",
        f"report:  {places.report}",
        *(f"bundle:  {places.bundle(family)}" for family in study.closure.families),
        "These closures are evidence for these invented regimes only.",
    ]
