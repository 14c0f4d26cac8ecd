"""The jobs of the project joined once, for the command line, scripts and notebooks."""
