"""Published cells and the fit of the spacing model to them."""
