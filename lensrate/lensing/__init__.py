"""One line of sight: quadratures, rates by element, distributions, the sightline forecast; many of them."""
