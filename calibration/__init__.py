"""Picture of a reference pattern in, metres per pixel out."""

__all__: list[str] = []
