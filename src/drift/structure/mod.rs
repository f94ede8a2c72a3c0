//! One file per kind of structure in residuals, and the examination that runs them all.
