"""Starts the page: `streamlit run app.py`. Everything is in converter_calc/page."""

from converter_calc.page.shell import show_page

show_page()
