//! What is read and written: detector and study files, run directories.
