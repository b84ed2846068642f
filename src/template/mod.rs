//! Templates: bin probabilities with errors, and their widths.
