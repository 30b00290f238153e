"""Problems, one file each; see `contract` for the recipe."""
