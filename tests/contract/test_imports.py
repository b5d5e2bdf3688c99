"""Who may import whom. Read from the sources, imports inside functions included."""

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
PACKAGES = ("service", "schemas")

MAY_IMPORT = {
    # every row may also import itself and the domain
    "service.domain": (),
    "service.version": (),
    "service.config": (),
    "service.log_lines": (),
    "service.airdata": (),
    "service.readers": ("service.airdata.constants",),
    "service.reduction": ("service.airdata",),
    "service.pipeline": ("service.reduction", "service.airdata"),
    "schemas": ("service.version",),
    "service.intake": ("service.pipeline", "service.readers", "schemas"),
    "service.summary": (),
    "service.fleet": (),
    "service.storage": (),
    "service.work": (
        "service.storage",
        "service.intake",
        "service.log_lines",
        "service.version",
        "schemas",
    ),
    "service.thinning": (),
    "service.keeping": (
        "service.storage",
        "service.fleet",
        "service.readers.registry",
        "service.thinning",
        "service.config",
        "schemas",
    ),
    "service.http": (
        "service.intake",
        "service.keeping",
        "service.storage.errors",
        "service.storage.flights",
        "service.storage.idempotency",
        "service.storage.pages",
        "service.storage.series_file",
        "service.storage.texts",
        "service.config",
        "service.log_lines",
        "service.version",
        "schemas",
    ),
    "service.server": ("service.config", "service.log_lines"),
    "service.app": ("service.http", "service.keeping", "service.config", "service.log_lines"),
    "service.cli_keeping": (
        "service.keeping",
        "service.work",
        "service.storage.keys",
        "service.config",
        "service.log_lines",
    ),
    "service.cli": (
        "service.cli_keeping",
        "service.http.gunzip",
        "service.http.spool",
        "service.intake",
        "service.summary",
        "service.config",
        "service.log_lines",
        "service.version",
        "schemas",
    ),
}
"""Row -> what it may import. The longest row that begins a module's name is the one for it."""

ONLY_IN = {
    "flask": ("service.app", "service.http"),
    "werkzeug": ("service.http",),
    "apispec": ("service.http.openapi",),
    "gunicorn": ("service.server",),
    "marshmallow": ("schemas", "service.http.openapi"),
    "msgspec": ("schemas.wire", "service.readers.batch"),
    "pyulog": ("service.readers",),
    "pint": ("service.readers",),
    "scipy": ("service.airdata", "service.fleet", "service.readers", "service.reduction"),
    "tqdm": ("service.cli",),
    "sqlalchemy": ("service.storage",),
    "alembic": ("service.storage",),
    "threadpoolctl": ("service.app",),
}
"""Library -> the only places that may import it."""


def module_name(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


def within(name: str, package: str) -> bool:
    return name == package or name.startswith(package + ".")


def imported(path: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path} imports relatively"
            yield node.module or ""


SOURCES = {module_name(path): path for package in PACKAGES for path in sorted((ROOT / package).rglob("*.py"))}
IMPORTS = [(name, other) for name, path in SOURCES.items() for other in sorted(set(imported(path)))]


def row_of(name: str) -> str:
    return max((row for row in MAY_IMPORT if within(name, row)), key=len)


def allowed(name: str, other: str) -> bool:
    row = row_of(name)
    return any(within(other, target) for target in (row, "service.domain", *MAY_IMPORT[row]))


def test_every_module_has_its_row() -> None:
    homeless = [name for name in SOURCES if name != "service" and not any(within(name, row) for row in MAY_IMPORT)]
    assert homeless == []
    assert len(SOURCES) > 50


def test_layers() -> None:
    wrong = [
        f"{name} -> {other}"
        for name, other in IMPORTS
        if any(within(other, package) for package in PACKAGES) and not allowed(name, other)
    ]
    assert wrong == []


def test_steps_of_the_reduction_never_import_one_another() -> None:
    """A step is a file or a folder of `service/reduction`; within its folder it may do as it likes."""

    def step(name: str) -> str:
        return ".".join(name.split(".")[:3])

    inside = [pair for pair in IMPORTS if all(within(name, "service.reduction") for name in pair)]
    assert [f"{name} -> {other}" for name, other in inside if step(name) != step(other)] == []


@pytest.mark.parametrize("library", ONLY_IN)
def test_libraries_stay_where_they_belong(library: str) -> None:
    users = [name for name, other in IMPORTS if within(other, library)]
    assert users, f"{library} is used nowhere: take it off the list and off the dependencies"
    assert [name for name in users if not any(within(name, place) for place in ONLY_IN[library])] == []


def test_the_rules_would_notice() -> None:
    assert not allowed("service.domain.log", "service.readers.registry")
    assert not allowed("service.reduction.series", "service.http.errors")
    assert not allowed("service.airdata.atmosphere", "schemas.settings")
    assert allowed("service.http.reductions", "service.intake")
