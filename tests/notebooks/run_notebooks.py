"""Run notebooks from top to bottom with the interpreter that runs this file.

``python tests/notebooks/run_notebooks.py`` runs all of them and writes their outputs back, or those that are named:
``run_notebooks.py nights``. Do this after a change that alters what a notebook shows. The tests run them in memory.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import Any

import nbformat
from jupyter_client.kernelspec import KernelSpec
from jupyter_client.manager import AsyncKernelManager
from nbclient import NotebookClient

REPO = Path(__file__).resolve().parents[2]
NOTEBOOKS = sorted((REPO / "notebooks").glob("*.ipynb"))


class ThisInterpreter(AsyncKernelManager):
    """A kernel of the running interpreter: one that is installed under the usual name may be another's."""

    @property
    def kernel_spec(self) -> KernelSpec:
        argv = [sys.executable, "-m", "ipykernel_launcher", "-f", "{connection_file}"]
        return KernelSpec(argv=argv, display_name="this interpreter", language="python")


def executed(path: Path, more: str = "") -> Any:
    """Return the notebook with fresh outputs; `more` is a last cell of code."""
    notebook = nbformat.read(path, as_version=4)
    if more:
        notebook.cells.append(nbformat.v4.new_code_cell(more))
    client = NotebookClient(
        notebook,
        kernel_manager_class=ThisInterpreter,
        timeout=180,
        record_timing=False,
        coalesce_streams=True,
        resources={"metadata": {"path": path.parent}},
    )
    paths = [str(REPO), *filter(None, [os.environ.get("PYTHONPATH")])]
    client.execute(env=os.environ | {"PYTHONPATH": os.pathsep.join(paths)})
    return notebook


def text_outputs(notebook: Any) -> list[str]:
    """Return what each code cell shows as plain text."""
    shown = []
    for cell in notebook.cells:
        if cell.cell_type == "code":
            texts = [out.get("text") or out.get("data", {}).get("text/plain", "") for out in cell.outputs]
            shown.append("".join(texts))
    return shown


if __name__ == "__main__":
    unknown = set(sys.argv[1:]) - {each.stem for each in NOTEBOOKS}
    if unknown:
        known = ", ".join(each.stem for each in NOTEBOOKS)
        sys.exit(f"no such notebook: {', '.join(sorted(unknown))}; there are {known}")
    for each in [one for one in NOTEBOOKS if one.stem in sys.argv[1:] or len(sys.argv) == 1]:
        fresh = executed(each)
        fresh.metadata = {
            "kernelspec": {"display_name": "Python 3", "language": "python", "name": "python3"},
            "language_info": {"name": "python"},
        }
        nbformat.write(fresh, each)
        print(each.relative_to(REPO))
