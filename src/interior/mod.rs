//! Degenerate stars: (mass, Teff) to radius, luminosity, age.
