"""Single events: mock catalogues, observed samples, what the lens is and what to measure next."""
