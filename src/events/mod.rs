//! Where truth events come from: generated spectra and event files.
