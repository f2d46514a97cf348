"""Laws of charged oil droplets in air: SI floats and arrays in, SI floats and arrays out."""

__all__: list[str] = []
