"""What checks the package's annotations while tests run (named in pyproject.toml)."""

from beartype import BeartypeConf, beartype

# As in the typing documentation, an int will do where a float is asked for.
check = beartype(conf=BeartypeConf(is_pep484_tower=True))
