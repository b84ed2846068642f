//! Scrambled Sobol points.
