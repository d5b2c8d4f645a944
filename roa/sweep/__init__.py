"""Room 4, *what happens, very many times?*: designs, blocks, executors, the store, resuming."""
