"""Star fields, magnification maps and tracks: the numerical engine."""
