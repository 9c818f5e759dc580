"""Where the ready profiles are: in the checkout, or inside the installed package."""

from __future__ import annotations

from pathlib import Path

from .problems import ProfileError, nearest


def ready_profiles() -> Path:
    """Give the folder of ready profiles: the checkout's `profiles` first, then the wheel's own copy.

    An editable install does not see the wheel's forced files, hence the order.
    """
    package = Path(__file__).resolve().parent.parent
    checkout = package.parent / "profiles"
    if checkout.is_dir() and (package.parent / "pyproject.toml").is_file():
        return checkout
    return package / "ready_profiles"


def ready_names() -> list[str]:
    """Give the names of the ready profiles, without ``.toml``, in order."""
    folder = ready_profiles()
    return sorted(p.relative_to(folder).with_suffix("").as_posix() for p in folder.rglob("*.toml"))


def find_profile(path: Path) -> Path:
    """Find a profile's file: the path itself, or the ready profile of that name.

    `profiles/loopback.toml`, `loopback.toml` and `loopback` name the ready one where no such file
    exists; any other path must exist, so that a mistyped one never runs something else.

    Raises
    ------
    ProfileError
        Naming the ready profiles.
    """
    try:
        if path.exists():
            return path
    except OSError as error:  # a name that is too long, a folder that may not be entered
        raise ProfileError(
            f"cannot read the profile {path}: {(error.strerror or str(error)).lower()}",
            "check the path and its rights",
        ) from None
    names = ready_names()
    wanted = path.as_posix().removeprefix("./").removeprefix("profiles/").removesuffix(".toml")
    if wanted in names:
        return ready_profiles() / f"{wanted}.toml"
    near = nearest(wanted, names)
    listed = f"; ready profiles: {', '.join(names)}" if names else ""
    advice = (f"did you mean {near}?" if near and _alike(near, wanted) else "check the path") + listed
    raise ProfileError(f"there is no profile {path}", advice)


def _alike(a: str, b: str) -> bool:
    import difflib

    return difflib.SequenceMatcher(None, a, b).ratio() > 0.6
