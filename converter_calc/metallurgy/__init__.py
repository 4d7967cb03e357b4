"""Tools of the metallurgist: laws, lime, slag practices and fluxes compared."""
