"""Run a module while no file of the plant's stories may be opened or listed.

``python -P sealed_child.py NOTES MODULE WORDS...``: each attempt raises PermissionError and is noted, for a
program may catch the error. A file's mode would not do: to root every file is open.
"""

import os
import runpy
import sys
from importlib.util import find_spec
from pathlib import Path

WATCHED = frozenset({"open", "os.listdir", "os.scandir"})


def sealed_folders() -> tuple[str, ...]:
    spec = find_spec("simulator")
    assert spec is not None
    assert spec.origin is not None
    home = Path(spec.origin).resolve().parent
    return tuple(str(home / name) for name in ("truths", "scenarios"))


def seal(folders: tuple[str, ...], notes: int) -> None:
    """Refuse these folders to this process from now on; there is no way back."""

    def refuse(event: str, arguments: tuple[object, ...]) -> None:
        if event not in WATCHED:
            return
        path = arguments[0] if arguments and arguments[0] is not None else "."
        if not isinstance(path, str | bytes | os.PathLike):
            return  # a file that is open already
        real = os.path.realpath(os.fsdecode(path))
        if any(real == folder or real.startswith(folder + os.sep) for folder in folders):
            os.write(notes, f"{event} {real}\n".encode())
            raise PermissionError(f"sealed: {real}")

    sys.addaudithook(refuse)


def main() -> None:
    notes_path, module, *words = sys.argv[1:]
    notes = os.open(notes_path, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o644)
    seal(sealed_folders(), notes)
    sys.argv = [module, *words]
    runpy.run_module(module, run_name="__main__", alter_sys=True)


if __name__ == "__main__":
    main()
