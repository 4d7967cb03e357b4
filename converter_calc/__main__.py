"""`python -m converter_calc` is the command line."""

from converter_calc.cli import main

main(prog_name="converter-calc")
