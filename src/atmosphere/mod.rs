//! (Teff, log g) to temperature structure to emergent spectrum.
