"""The public interface, its docstrings, the structure of the package and of the repository."""

import ast
import inspect
import re
import subprocess
import sys
from pathlib import Path

import pytest

import mfeat
from mfeat import (
    demo,
    descriptors,
    estimate,
    functionals,
    images,
    levels,
    patches,
    sources,
    surfaces,
)

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "mfeat"

DOCUMENTED = [
    mfeat.count_patterns,
    mfeat.minkowski_curves,
    mfeat.MinkowskiCurves,
    mfeat.PatchGrid,
    mfeat.PatchGrid.cut,
    patches.Patches.label,
    functionals.area,
    functionals.contour,
    functionals.euler,
    levels.level_values,
    surfaces.simulate_panel,
    surfaces.gaussian_field,
    surfaces.boolean_discs,
    demo.write_demo,
    mfeat.dump,
    mfeat.read_table,
    images.read_image,
    sources.list_sources,
    estimate.estimate,
    *descriptors.DESCRIPTORS.values(),
]


def test_the_public_names():
    assert mfeat.__all__ == [
        "Comparison",
        "Curves",
        "FeatureTable",
        "MinkowskiCurves",
        "PatchGrid",
        "PatternCounts",
        "compare",
        "count_patterns",
        "dump",
        "minkowski_curves",
        "read_comparison",
        "read_table",
    ]
    assert all(hasattr(mfeat, name) for name in mfeat.__all__)
    assert re.fullmatch(r"\d+\.\d+\.\d+", mfeat.__version__)
    assert (PACKAGE / "py.typed").exists()


def documented_parameters(item):
    """Return {name: text of its first line} of the Parameters section."""
    doc = inspect.getdoc(item)
    section = re.search(r"^Parameters\n-+\n(.*?)(?=^\w[\w ]*\n-+\n|\Z)", doc, re.M | re.S)
    assert section, f"{item} has no Parameters section"
    entries = re.findall(r"^(\w[\w, ]*?) : (.*)$|^(\w+) : ignored$", section[1], re.M)
    return {
        name.strip(): text
        for names, text, _ in entries
        for name in names.split(",")
        if name.strip()
    }


@pytest.mark.parametrize("item", DOCUMENTED, ids=lambda item: item.__qualname__)
def test_docstrings_agree_with_signatures(item):
    signature = inspect.signature(item)
    parameters = [p for p in signature.parameters.values() if p.name != "self"]
    documented = documented_parameters(item)
    assert list(documented) == [p.name for p in parameters]
    for parameter in parameters:
        text = documented[parameter.name]
        if parameter.default is inspect.Parameter.empty or text == "ignored":
            assert "default" not in text
        elif parameter.default is None:
            assert "optional" in text, (item, parameter.name)
        else:
            shown = re.search(r"default (.*)$", text)
            assert shown, (item, parameter.name)
            assert ast.literal_eval(shown[1]) == parameter.default, (item, parameter.name)
    assert ">>>" in inspect.getdoc(item)


def test_the_docstring_check_can_fail():
    def wrong(size=3):
        """Do nothing.

        Parameters
        ----------
        size : int, default 4
            A size.
        """

    with pytest.raises(AssertionError):
        test_docstrings_agree_with_signatures(wrong)


# What each module may import from the package: the way from kernels up.
LAYERS = {
    "_jit": set(),
    "_kernels": {"_jit"},
    "_field_kernels": {"_jit"},
    "_checks": {"_kernels"},
    "counts": {"_checks", "_kernels"},
    "functionals": {"_checks", "counts"},
    "levels": {"_checks", "counts", "smoothing"},
    "smoothing": {"_checks", "_field_kernels", "_kernels"},
    "matching": {"_field_kernels", "smoothing"},
    "fields": {"_checks", "_field_kernels", "levels", "matching", "smoothing"},
    "basis": {"_checks"},
    "plan": {"_checks", "basis", "fields", "functionals", "levels"},
    "settings": {"_checks", "basis", "fields", "functionals", "levels", "plan"},
    "stacks": {"_checks", "_kernels"},
    "vector": {
        *["_checks", "_kernels", "counts", "fields", "functionals", "levels", "plan", "stacks"],
        *["basis", "matching", "smoothing"],
    },
    "_descriptor_base": {"_checks", "smoothing", "stacks"},
    "_filters": set(),
    "_haralick": set(),
    "_descriptors_grey": {"_checks", "_descriptor_base", "_haralick"},
    "_descriptors_filters": {"_descriptor_base", "_filters"},
    "_descriptors_local": {"_checks", "_descriptor_base", "_filters"},
    "_descriptors_spectral": {"_checks", "_descriptor_base", "_filters"},
    "descriptors": {
        *["_descriptor_base", "_descriptors_filters", "_descriptors_grey", "_descriptors_local"],
        "_descriptors_spectral",
    },
    "curves": {"_checks", "counts", "fields", "functionals", "levels"},
    "transformer": {"fields", "functionals", "levels", "plan", "settings", "stacks", "vector"},
    "patches": {"_checks", "counts"},
    "_marks": set(),
    "surfaces": {"_checks", "_marks"},
    "demo": {"_checks", "surfaces"},
    "_pages": set(),
    "_formats": {"_pages"},
    "_tiff": {"_formats", "_pages"},
    "locations": set(),
    "storage": {"locations"},
    "images": {"_checks", "_formats", "_pages", "_tiff", "locations"},
    "entries": {"locations"},
    "manifests": {"entries", "locations", "storage"},
    "sources": {"entries", "locations", "manifests"},
    "schema": {"plan", "settings", "transformer"},
    "table": {"locations", "schema", "storage", "transformer"},
    "options": {
        *["_checks", "basis", "images", "levels", "locations", "patches", "schema", "transformer"],
    },
    "planning": {"entries", "images", "options", "plan", "schema", "settings"},
    "cutting": {"_pages", "images", "options", "patches", "planning"},
    "parts": {
        *["_pages", "cutting", "entries", "options", "patches", "plan", "planning", "schema"],
        *["locations", "stacks", "storage", "vector"],
    },
    "workers": {"_checks"},
    "publishing": {"parts", "schema"},
    "runs": {
        "_checks",
        "publishing",
        "entries",
        "options",
        "parts",
        "planning",
        "schema",
        "storage",
    },
    "dump": {"images", "locations", "options", "runs", "schema", "sources", "storage", "workers"},
    "estimate": {
        "_checks",
        *["_pages", "cutting", "entries", "options", "parts", "planning", "schema", "sources"],
        *["locations", "workers"],
    },
    "significance": set(),
    "conditions": {"_checks", "smoothing"},
    "trials": set(),
    "packing": {"conditions"},
    "retrace": {"entries", "locations", "options", "parts", "publishing", "schema", "storage"},
    "pool": {
        "_checks",
        "_pages",
        "conditions",
        "cutting",
        "entries",
        "images",
        "options",
        "patches",
        "planning",
        "vector",
    },
    "candidates": {"_checks", "descriptors", "transformer"},
    "variants": {"fields", "plan", "transformer"},
    "contest": {"candidates", "conditions", "trials"},
    "contests": {"conditions", "contest", "entries", "options", "pool", "trials"},
    "costs": {"candidates", "contest"},
    "comparison": {"_checks", "locations", "significance", "storage"},
    "charts": set(),
    "pages": set(),
    "report": {"charts", "comparison", "conditions", "pages", "significance"},
    "comparing": {
        "comparison",
        "contest",
        "contests",
        "costs",
        "entries",
        "packing",
        "pool",
        "publishing",
        "report",
        "schema",
        "storage",
    },
    "compare": {
        "_checks",
        "candidates",
        "comparing",
        "comparison",
        "conditions",
        "contests",
        "entries",
        "images",
        "locations",
        "options",
        "planning",
        "publishing",
        "report",
        "retrace",
        "schema",
        "sources",
        "storage",
        "trials",
        "variants",
        "workers",
    },
    "cli": {
        "candidates",
        "compare",
        "conditions",
        "demo",
        "descriptors",
        "dump",
        "estimate",
        "images",
        "options",
        "parts",
        "patches",
        "report",
        "storage",
        "transformer",
        "trials",
        "workers",
    },
    "__main__": {"cli"},
    "__init__": {
        "compare",
        "comparison",
        "counts",
        "curves",
        "dump",
        "patches",
        "table",
        "transformer",
    },
}


def imports_of(source):
    """Return the package's modules that a module imports."""
    found = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.ImportFrom) and node.module == "mfeat":
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and (node.module or "").startswith("mfeat."):
            found.add(node.module.split(".")[1])
        elif isinstance(node, ast.Import):
            found |= {a.name.split(".")[1] for a in node.names if a.name.startswith("mfeat.")}
    return {name for name in found if not name.startswith("__version")}


def test_imports_flow_one_way():
    modules = {path.stem: path.read_text(encoding="utf-8") for path in PACKAGE.glob("*.py")}
    assert set(modules) == set(LAYERS)
    for name, source in modules.items():
        assert imports_of(source) <= LAYERS[name], name
    # the checker sees an import where there is one
    assert imports_of("from mfeat.cli import main\nfrom mfeat import levels") == {"cli", "levels"}


def test_optional_libraries_are_not_needed_to_import():
    code = (
        "import sys; sys.modules.update(dict.fromkeys(['matplotlib', 'pandas', 'polars', 'dask']));"
        "import mfeat, mfeat.cli"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_the_top_level_of_the_repository():
    allowed = {
        *["README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE"],
        *["mfeat", "tests", "recipes", "benchmarks"],
    }
    made_by_use = {"out", "build", "dist", "htmlcov"}
    found = {p.name for p in ROOT.iterdir() if not p.name.startswith(".")} - made_by_use
    assert {name for name in found if not name.endswith(".egg-info")} == allowed


def test_readme_opens_with_the_job_and_two_lines():
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if line.startswith("python3 -m venv")]
    assert len(lines) == 2
    assert "recipes/panel_defects.py" in lines[0]
    assert "pytest" in lines[1]
    assert "verdict is an aid" in text
    assert text.index("turns image patches") < text.index(lines[0]) < text.index(lines[1])


def test_the_examples_of_the_readme_run():
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"```python\n(.*?)```", text, re.S)
    assert len(blocks) >= 3
    names = {"MinkowskiCurves": mfeat.MinkowskiCurves}
    for block in blocks:
        exec(compile(block, "README.md", "exec"), names)
    assert names["upper"] + names["lower"] == names["count_patterns"](
        names["image"], [80, 120, 160]
    )


@pytest.mark.parametrize("command", [["check", "."], ["format", "--check", "."]])
def test_the_code_is_lint_free_and_formatted(command):
    run = subprocess.run(
        [sys.executable, "-m", "ruff", *command],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert run.returncode == 0, run.stdout + run.stderr
