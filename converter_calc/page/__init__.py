"""The page in a browser. The only part of the package that imports streamlit; no metallurgy."""
