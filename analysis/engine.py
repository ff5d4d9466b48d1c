"""The version of the arithmetic. It is part of every digest: raise it whenever a number could come out differently."""

ENGINE = "1.0.0"
