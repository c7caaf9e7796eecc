"""module:function: a Python function of the user's, found beside the study or installed."""

from __future__ import annotations

import hashlib
import importlib
import importlib.util
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from types import ModuleType
from typing import Annotated, Any

from pydantic import Field

from nipc.errors import InputError

Reference = Annotated[str, Field(pattern=r"^[A-Za-z_][\w.]*:[A-Za-z_]\w*$")]


def source_file(folder: Path, reference: str) -> Path | None:
    """The file beside the study that holds the function, None where the module is installed."""
    module = reference.split(":")[0]
    path = folder / (module.replace(".", "/") + ".py")
    if path.is_file():
        return path
    return None


def check_reference(folder: Path, reference: str) -> None:
    """Raise InputError when there is no such module; nothing of it is run."""
    if source_file(folder, reference) is not None:
        return
    module = reference.split(":")[0]
    try:
        found = importlib.util.find_spec(module.split(".")[0])
    except (ImportError, ValueError):
        found = None
    if found is None:
        raise InputError(
            f"there is no module {module!r}: neither {module.replace('.', '/')}.py in {folder} nor "
            "an installed package"
        )


def load_function(folder: Path, reference: str) -> Callable[..., Any]:
    """Import the function; InputError says why it cannot be."""
    module_name, name = reference.split(":")
    check_reference(folder, reference)
    path = source_file(folder, reference)
    try:
        module = importlib.import_module(module_name) if path is None else _module(path, folder)
    except Exception as error:
        place = path or module_name
        raise InputError(f"{place} does not import: {type(error).__name__}: {error}") from error
    function = getattr(module, name, None)
    if not callable(function):
        known = [n for n, v in vars(module).items() if callable(v) and not n.startswith("_")]
        raise InputError(
            f"{path or module_name} has no function {name!r}; it has: {', '.join(known) or 'none'}"
        )
    return function


def _module(path: Path, folder: Path) -> ModuleType:
    """A module loaded from its file under a name of its own; its neighbours can be imported.

    The name holds the file's time and size, so that a file changed within a session is read again.
    """
    path = path.resolve()
    stamp = path.stat()
    key = f"{path} {stamp.st_mtime_ns} {stamp.st_size}"
    name = "nipc_study_" + hashlib.sha256(key.encode()).hexdigest()[:16]
    if name in sys.modules:
        return sys.modules[name]
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise ImportError(f"{path} is not a Python module")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    sys.path.insert(0, str(folder))
    importlib.invalidate_caches()
    before = set(sys.modules)
    try:
        spec.loader.exec_module(module)
    except BaseException:
        del sys.modules[name]
        raise
    finally:
        sys.path.remove(str(folder))
        # another study may have a neighbour of the same name
        for other in set(sys.modules) - before:
            file = getattr(sys.modules[other], "__file__", None)
            if file and Path(file).parent == folder:
                del sys.modules[other]
    return module


def code_digest(folder: Path, references: Sequence[str], depends: Sequence[str]) -> str:
    """Hash of the files that hold the functions and of those listed; packages by their version."""
    digest = hashlib.sha256()
    for reference in references:
        path = source_file(folder, reference)
        digest.update(reference.encode())
        if path is None:
            digest.update(_version_of(reference.split(":")[0]).encode())
        else:
            digest.update(path.read_bytes())
    for name in depends:
        try:
            digest.update(name.encode() + (folder / name).read_bytes())
        except OSError as error:
            raise InputError(f"depends: cannot read {name!r}: {error.strerror}") from None
    return digest.hexdigest()


def check_depends(folder: Path, depends: Sequence[str]) -> None:
    """Raise InputError when a file that kept runs depend on is not there."""
    for name in depends:
        if not (folder / name).is_file():
            raise InputError(f"depends: there is no file {name!r} in {folder}")


def _version_of(module: str) -> str:
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version(module.split(".")[0])
    except PackageNotFoundError:
        return "unknown"
