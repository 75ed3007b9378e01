"""The program's version; pyproject.toml is the one place that holds it."""


def version() -> str:
    """The version that the installed distribution states; ``unknown`` where the packages are used without installation."""
    from importlib import metadata

    try:
        return metadata.version("lidwatch")
    except metadata.PackageNotFoundError:
        return "unknown"
