//! Nothing: what is wanted is the archive that the dependency's build leaves.
