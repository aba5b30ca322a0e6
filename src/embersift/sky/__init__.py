"""From the source to the observer: distance, bands, absorption, apertures."""
