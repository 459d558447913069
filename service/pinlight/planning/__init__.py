"""Planning: blocks of looks, and nights of blocks."""
