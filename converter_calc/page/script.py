"""What the server runs for each session."""

from converter_calc.page.shell import show_page

show_page()
