"""The whole job in the terminal, on the demonstration plant, in the order an engineer needs it."""

from __future__ import annotations

from pathlib import Path
from shlex import quote
from typing import TYPE_CHECKING

from schurbench.errors import InputError

if TYPE_CHECKING:
    from schurbench.cli.console import Console

__all__ = ["tell"]

DONE, INTERRUPTED = 0, 130

#: Remarks and findings shown; the commands named at the end show all of them.
SHOWN = 4


def tell(folder: Path, n: int | None, replace: bool, console: Console) -> int:
    """Do the job and leave matrix, run, factors and manifest in `folder`.

    Raises
    ------
    InputError
        The folder holds something already, and `replace` is not set.
    """
    import numpy as np

    import schurbench as sb
    from schurbench.cli.console import interruptible
    from schurbench.cli.wording import describe_run, introduce, tabulate
    from schurbench.factors import check_manifest

    if folder.exists() and not folder.is_dir():
        raise InputError(f"{folder} is a file; name a new folder with -o")
    if folder.exists() and any(folder.iterdir()) and not replace:
        raise InputError(f"{folder} holds files already; name another folder with -o, or add --replace")
    plant = sb.demo_matrix() if n is None else sb.demo_matrix(n)
    folder.mkdir(parents=True, exist_ok=True)

    matrix_file, label_file = folder / f"{plant.name}.npy", folder / f"{plant.name}_states.txt"
    run_file, factor_file = folder / f"{plant.name}_run.npz", folder / f"{plant.name}_schur.mat"
    np.save(matrix_file, plant.array)
    label_file.write_text("\n".join(plant.labels or ()) + "\n", encoding="utf-8")

    console.say("1. The matrix")
    console.sentence(
        f"A chain of identical irrigation-canal reaches, each with a controller: {plant.n} states in mixed units, "
        f"written to {matrix_file} and read back as your own matrix would be."
    )
    m = sb.load(matrix_file, labels=label_file)
    introduce(m, console)
    for remark in sb.profile(m).remarks[:SHOWN]:
        console.sentence(f"- {remark}")

    console.say("\n2. The iteration, every sweep recorded")
    with interruptible() as cancel:
        run = sb.iterate(m, progress=console.progress(m.n), cancel=cancel)
        run.save(run_file, replace=replace)
        describe_run(run, console)
        console.sentence(f"Saved to {run_file}.")

        if not cancel.is_set():
            console.say("\n3. Why it went as it did")
            for finding in sb.diagnose(run).findings[:SHOWN]:
                console.sentence(f"- {finding.statement}")
                if finding.remedy is not None:
                    console.sentence(f"  Remedy: {finding.remedy.text}")

            console.say("\n4. Other strategies and settings on the same matrix")
            entries: list[str | dict[str, str]] = ["francis", {"strategy": "francis", "balance": "both"}, "wilkinson"]
            comparison = sb.compare(m, entries, progress=console.progress(m.n), cancel=cancel)
            tabulate(comparison, console)

        console.say("\n5. Factors with a certificate")
        factors = run.factors()
        *_, manifest = factors.save(factor_file, replace=replace)
        for sentence in (factors.certificate().sentence, factors.trust, *factors.notes):
            console.sentence(sentence)
        console.sentence(f"T and Z are in {factor_file}, what they are and where they come from in {manifest}.")
        console.sentence(f"The manifest read back: {check_manifest(manifest).sentence}")

    console.say("\nNext")
    console.table(
        ("command", "what it shows"),
        [
            (f"schurbench explain {quote(str(run_file))}", "all findings, with evidence"),
            (f"schurbench profile {quote(str(matrix_file))}", "everything known before iterating"),
            (f"schurbench check {quote(str(manifest))}", "whether the factors are still what they were"),
            (f"schurbench open {quote(str(matrix_file))}", "the same in JupyterLab, sweep by sweep"),
        ],
    )
    return INTERRUPTED if cancel.is_set() else DONE
