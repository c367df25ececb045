"""clustered: a multiple, nearly defective eigenvalue that rounding spreads into a ring."""

from __future__ import annotations

from schurbench.diagnosis.case import Case, Cluster, Stretch
from schurbench.diagnosis.causes.base import Judgement, all_rows, more_stretches, sweeps_of
from schurbench.diagnosis.finding import ClusterRemedy, Finding, Rank
from schurbench.diagnosis.remedies import change
from schurbench.measures import ULP
from schurbench.prepare.plain import number

__all__ = ["Clustered", "ClusteredEigenvalues"]

_CODE = "clustered"

#: Members from which a cluster explains a long wait: a pair of eigenvalues is solved directly.
_LEAST = 3


class Clustered:
    """The shifts close in on a ring of eigenvalues as a whole, only linearly, before they find one of its members."""

    code = _CODE

    def judge(self, case: Case, stretch: Stretch) -> Judgement | None:
        """Fits when the rows that deflated at the end belong to a cluster and the shifts follow the matrix."""
        if stretch.end is None or case.run.settings.strategy in ("zero", "given"):
            return None
        lo, hi = stretch.window
        ended = range(stretch.end.row, min(stretch.end.row + stretch.end.size, hi))
        for cluster in case.clusters:
            inside = [row for row in cluster.rows if lo <= row < hi]
            if len(inside) >= _LEAST and any(row in cluster.rows for row in ended):
                evidence = {"sweeps_without_deflation": float(stretch.length), **_evidence(case, cluster)}
                certainty = min(1.0, cluster.movement / cluster.radius) if cluster.radius > 0.0 else 1.0
                return Judgement(
                    stretch,
                    (stretch.end.row, ended.stop),
                    confidence=round(0.6 + 0.35 * certainty, 3),
                    evidence=evidence,
                )
        return None

    def finding(self, case: Case, judgements: tuple[Judgement, ...]) -> Finding:
        """Names the cluster and points to its mean."""
        worst = judgements[0]
        cluster = _of(case, worst.rows)
        statement = (
            f"For {worst.stretch.length} sweeps the shifts closed in on {_sentence(case, cluster)}; no member stands "
            f"out, and shifts approach the ring linearly{case.carriers(worst.rows)}."
        )
        return Finding(
            cause=self.code,
            statement=statement + more_stretches(judgements),
            evidence=worst.evidence,
            rows=all_rows(judgements),
            steps=sweeps_of(judgements),
            confidence=worst.confidence,
            remedy=_remedy(case, cluster),
        )


class ClusteredEigenvalues:
    """The same seen in the result: members of a cluster are not determined one by one."""

    code = _CODE

    def finding(self, case: Case) -> Finding | None:
        """Applies to a converged run with a cluster, and names the largest."""
        if not case.clusters:
            return None
        cluster = case.clusters[0]
        others = sum(len(c.rows) for c in case.clusters[1:])
        statement = f"The run found {_sentence(case, cluster)}: single members are not determined, their mean is"
        more = f" Further clusters hold {others} eigenvalues." if others else ""
        return Finding(
            cause=self.code,
            statement=f"{statement}.{more}",
            evidence={**_evidence(case, cluster), "clusters": len(case.clusters)},
            rows=cluster.rows,
            confidence=0.9,
            remedy=_remedy(case, cluster),
            rank=Rank.EIGENVALUES,
        )


def _of(case: Case, rows: tuple[int, int]) -> Cluster:
    return next(c for c in case.clusters if len(c.rows) >= _LEAST and any(row in c.rows for row in range(*rows)))


def _evidence(case: Case, cluster: Cluster) -> dict[str, float]:
    units = case.run.to_matrix_units
    return {
        "members": float(len(cluster.rows)),
        "centre_real": float(units(cluster.centre.real)),
        "centre_imaginary": float(units(cluster.centre.imag)),
        "measured_radius": float(units(cluster.radius)),
        "predicted_movement_by_rounding": float(units(cluster.movement)),
        "largest_condition_number": cluster.condition,
        "rounding_level_of_norm": float(units(ULP * case.run.norm)),
    }


def _sentence(case: Case, cluster: Cluster) -> str:
    units = case.run.to_matrix_units
    centre = number(float(units(cluster.centre.real)))
    if abs(cluster.centre.imag) > cluster.radius:  # otherwise the ring reaches over the real axis
        sign = "−" if cluster.centre.imag < 0 else "+"
        centre += f" {sign} {number(abs(float(units(cluster.centre.imag))))}i"
    return (
        f"a cluster of {len(cluster.rows)} eigenvalues around {centre}, radius {number(float(units(cluster.radius)))}, "
        f"with condition numbers up to {number(cluster.condition)} (rounding spreads a multiple eigenvalue into such a "
        "ring)"
    )


def _remedy(case: Case, cluster: Cluster) -> ClusterRemedy | None:
    """Reordering needs finished factors; a run without Z has none."""
    run = case.run
    if not run.settings.accumulate or not run.converged:
        return None
    centre = complex(run.to_matrix_units(cluster.centre))
    if run.settings.form == "real":
        centre = complex(centre.real, abs(centre.imag))
    keywords = "".join(f", {name}={value!r}" for name, value in change(case, "").settings.items())
    return ClusterRemedy(
        text="Use the mean of the cluster and its invariant subspace, which are well determined, not single members.",
        source=run,
        again=f"schurbench.iterate(matrix{keywords})",
        centre=centre,
        # Factors of a scaled run are computed anew from the loaded matrix and may move members by about the radius.
        radius=3.0 * float(run.to_matrix_units(cluster.radius)) + 1e-6 * abs(centre),
    )
