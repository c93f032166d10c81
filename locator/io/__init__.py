"""The only code of the package that opens data files."""
