"""What an age fit needs, as files that astropy alone can read: ECSV and FITS, samples, and a page that explains them."""

from __future__ import annotations

import io
import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.balance.solution import PARAMETER_NAMES
from specsolve.durable import write_atomically
from specsolve.provenance import collect
from specsolve.report.tables import make_table, write_table
from specsolve.schema import columns_of, describe

from .cluster import Cluster, Member
from .results import Results

if TYPE_CHECKING:
    from astropy.table import Table

N_SAMPLES = 400
ENDINGS = {
    "handoff": "",
    "handoff_candidates": "_candidates",
    "handoff_samples": "_samples",
    "cluster": "_common",
    "decisions": "_decisions",
}

EXAMPLE = """\
from astropy.table import Table
stars = Table.read("{name}.ecsv")
modes = stars["list_modes"].data                       # (star, parameter, mode)
shared = modes.reshape(-1, modes.shape[2])             # rows: star after star, (teff, logg, feh, vmic)
covariance = shared @ shared.T                         # list errors of all stars; add cov_star on the diagonal blocks
"""

ABOUT = """\
{title}
{line}

{name}.ecsv             one row a star and treatment (also the first table of {name}.fits)
{name}_candidates.ecsv  every near-equal candidate of every star, with its odds
{name}_samples.ecsv     joint draws: one `sample` number is one draw of the shared errors for all stars
{name}_common.ecsv      common [Fe/H], intrinsic scatter, field
{name}_decisions.ecsv   the record of the solves, with what the cluster added

A star's own errors are cov_star. Errors of the line list (log gf, or the reference star) are the same for all stars: they
are the list_modes, counted once, not in cov_star. With unit normal numbers z_k, the same for all rows, row i is off by
the sum over k of list_modes[i, :, k] z_k; so cov_list[i] = list_modes[i] list_modes[i]^T. Draws are normal about each
candidate. Systematic terms stand apart, as shifts, and are in none of the covariances.
{fed}
In five lines:

{example}
Columns of {name}.ecsv

{handoff}

Columns of {name}_candidates.ecsv

{candidates}

Columns of {name}_samples.ecsv

{samples}
"""


def handoff_tables(
    cluster: Cluster,
    rng: np.random.Generator | None = None,
    n_samples: int = N_SAMPLES,
    provenance: Mapping[str, Any] | None = None,
) -> dict[str, Table]:
    """The tables of a handoff.

    Parameters
    ----------
    cluster : Cluster
    rng : numpy.random.Generator, optional
        For the samples; seed 0 if not given.
    n_samples : int
        Joint draws of all stars.
    provenance : mapping, optional

    Returns
    -------
    dict of str to Table
        Kinds handoff, handoff_candidates, handoff_samples, cluster, decisions.
    """
    rng = np.random.default_rng(0) if rng is None else rng
    rows = {
        "handoff": [_row(cluster, i) for i in range(len(cluster.members))],
        "handoff_candidates": [row for member in cluster.members for row in _candidate_rows(member)],
        "cluster": [_common_row(cluster, treatment) for treatment in cluster.common],
        "decisions": _decision_rows(cluster),
    }
    columns = {
        kind: {c.name: [row[c.name] for row in found] for c in columns_of(kind) if c.name != "list_modes"}
        for kind, found in rows.items()
    }
    columns["handoff_samples"] = _samples(cluster, rng, n_samples)
    tables = {kind: make_table(kind, found, provenance, subset=True) for kind, found in columns.items()}
    from astropy.table import Column

    words = next(c.description for c in columns_of("handoff") if c.name == "list_modes")
    after = tables["handoff"].colnames.index("cov_list") + 1
    tables["handoff"].add_column(Column(cluster.modes, name="list_modes", description=words), index=after)
    for table in tables.values():
        table.meta["notes"] = list(cluster.notes)
    return tables


def write_handoff(
    cluster: Cluster,
    output: str | Path,
    *,
    seed: int = 0,
    n_samples: int = N_SAMPLES,
    options: Mapping[str, Any] | None = None,
) -> dict[str, Path]:
    """Write a handoff: ``X.ecsv`` and its sister tables, ``X.fits``, ``X_about.txt``; the main table comes last.

    Parameters
    ----------
    cluster : Cluster
    output : path-like
        X; a trailing ``.ecsv`` is understood.
    seed : int
        Of the samples.
    n_samples : int
    options : mapping, optional
        Into the provenance.

    Raises
    ------
    OutputError
    """
    path = Path(output)
    name = path.name.removesuffix(".ecsv")
    provenance = collect(
        inputs=cluster.results.paths[:1],
        options={"feed_metallicity": cluster.fed, "decide_by_sequence": cluster.decided_by_sequence}
        | dict(options or {}),
        seed=seed,
        grid={"identity": cluster.results.grid_identity},
    )
    tables = handoff_tables(cluster, np.random.default_rng(seed), n_samples, provenance)
    paths = {}
    for kind in reversed(ENDINGS):
        if kind != "handoff":
            paths[kind] = write_table(tables[kind], path.parent / f"{name}{ENDINGS[kind]}.ecsv")
    paths["fits"] = path.parent / f"{name}.fits"
    write_atomically(paths["fits"], fits_bytes(tables))
    paths["about"] = path.parent / f"{name}_about.txt"
    write_atomically(paths["about"], about(cluster, name).encode())
    paths["handoff"] = write_table(tables["handoff"], path.parent / f"{name}.ecsv")
    return paths


def fits_bytes(tables: Mapping[str, Table]) -> bytes:
    """The same tables as extensions of one FITS file; nested metadata become one JSON card each."""
    from astropy.io import fits
    from astropy.table import Table as Plain

    units = [fits.PrimaryHDU()]
    for kind in ("handoff", "handoff_candidates", "handoff_samples", "cluster"):
        plain = Plain(tables[kind], copy=True)
        meta = plain.meta
        plain.meta = {}
        for name in plain.colnames:
            if str(plain[name].unit) == "dex":  # not a unit of the FITS standard
                plain[name].unit = None
        unit = fits.table_to_hdu(plain)
        unit.name = kind.upper()
        unit.header["KIND"], unit.header["SCHEMA"] = meta["kind"], meta["schema"]
        for note in meta.get("notes", []):
            unit.header.add_comment(note.encode("ascii", "replace").decode())
        unit.header.add_history(json.dumps(meta["provenance"], sort_keys=True).encode("ascii", "replace").decode())
        units.append(unit)
    stream = io.BytesIO()
    fits.HDUList(units).writeto(stream)
    return stream.getvalue()


def about(cluster: Cluster, name: str) -> str:
    """The page that explains a handoff."""
    title = f"Handoff of {len({m.name for m in cluster.members})} stars for age fitting"
    fed = "".join(f"\nNote: {note}." for note in cluster.notes) + "\n"
    return ABOUT.format(
        title=title,
        line="=" * len(title),
        name=name,
        fed=fed,
        example="".join(f"    {line}\n" for line in EXAMPLE.format(name=name).splitlines()),
        handoff=describe("handoff"),
        candidates=describe("handoff_candidates"),
        samples=describe("handoff_samples"),
    )


def _four(template: str, values: np.ndarray) -> dict[str, float]:
    return {template.format(name): float(value) for name, value in zip(PARAMETER_NAMES, values, strict=True)}


def _row(cluster: Cluster, i: int) -> dict[str, Any]:
    member = cluster.members[i]
    entry = cluster.results.stars[member.row]
    modes = cluster.modes[i]
    return {
        "star": member.name,
        "treatment": member.treatment,
        "status": member.status,
        "flags": str(entry["flags"]),
        "cov_star": member.point.cov_star,
        "cov_list": modes @ modes.T,
        "systematics": str(entry["systematics"]),
        "member_probability": member.probability,
        "n_candidates": len(member.candidates),
        "candidate_odds": member.candidates[0].odds,
        "feh_prior": member.prior[0],
        "feh_prior_error": member.prior[1],
        "sequence_distance": member.sequence[0],
        "sequence": member.sequence[1],
        "decided_by": member.decided_by,
    } | _four("{}", member.point.theta) | _four("before_{}", member.before)  # fmt: skip


def _candidate_rows(member: Member) -> list[dict[str, Any]]:
    return [
        {
            "star": member.name,
            "treatment": member.treatment,
            "candidate": one.index,
            "cov_star": one.point.cov_star,
            "odds_before": one.odds_before,
            "odds": one.odds,
        }
        | _four("{}", one.point.theta)
        for one in member.candidates
    ]


def _common_row(cluster: Cluster, treatment: str) -> dict[str, Any]:
    found = cluster.common[treatment]
    places = [i for i, member in enumerate(cluster.members) if member.treatment == treatment]
    weight = found.membership / found.membership.sum()
    shared = np.linalg.norm(np.einsum("i,im->m", weight, cluster.modes[places, 2]))
    return {
        "treatment": treatment,
        "n_stars": len(places),
        "n_members": float(found.membership.sum()),
        "feh": found.feh,
        "feh_error_star": found.feh_error,
        "feh_error_list": float(shared),
        "intrinsic_scatter": found.scatter,
        "intrinsic_scatter_limit": found.scatter_limit,
        "field_share": found.field_share,
        "fed": cluster.fed,
    }


def _decision_rows(cluster: Cluster) -> list[dict[str, Any]]:
    """The record of the solves, each star's followed by what the cluster added."""
    results: Results = cluster.results
    names = [column.name for column in columns_of("decisions")]
    rows = []
    for member in cluster.members:
        own = results.rows_of(results.decisions, member.row)
        rows += [{name: entry[name] for name in names} for entry in own]
        last = max([int(entry["step"]) for entry in own], default=0)
        for k, step in enumerate(member.decisions, start=1):
            added = {name: getattr(step, name) for name in names if hasattr(step, name)}
            rows.append(added | {"star": member.name, "treatment": member.treatment, "step": last + k})
    return rows


def _samples(cluster: Cluster, rng: np.random.Generator, n_samples: int) -> dict[str, np.ndarray]:
    """Joint draws: the shared errors once a draw, the star's own for each star, the candidate by its odds."""
    shared = rng.standard_normal((n_samples, cluster.modes.shape[2]))
    star, treatment, sample, candidate, values = [], [], [], [], []
    own_draws: dict[str, np.random.Generator] = {}
    for member, modes in zip(cluster.members, cluster.modes, strict=True):
        own = own_draws.setdefault(f"{member.name} {member.treatment}", rng.spawn(1)[0])
        odds = np.array([one.odds for one in member.candidates])
        chosen = own.choice(len(odds), size=n_samples, p=odds / odds.sum())
        draws = np.empty((n_samples, 4))
        for k, one in enumerate(member.candidates):
            which = chosen == k
            draws[which] = one.point.theta + own.standard_normal((which.sum(), 4)) @ root(one.point.cov_star).T
        values.append(draws + shared @ modes.T)
        star += [member.name] * n_samples
        treatment += [member.treatment] * n_samples
        sample.append(np.arange(n_samples))
        candidate.append(np.array([one.index for one in member.candidates])[chosen])
    joined = np.concatenate(values)
    columns = {
        "star": star,
        "treatment": treatment,
        "sample": np.concatenate(sample),
        "candidate": np.concatenate(candidate),
    }
    return columns | {name: joined[:, k] for k, name in enumerate(PARAMETER_NAMES)}


def root(covariance: np.ndarray) -> np.ndarray:
    """R with R R^T = covariance, also where parameters are exact."""
    values, vectors = np.linalg.eigh(covariance)
    return vectors * np.sqrt(np.maximum(values, 0.0))
