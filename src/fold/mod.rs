//! The folding engine, and the plain reference path.
