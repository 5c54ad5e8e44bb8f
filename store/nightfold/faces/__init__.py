"""The faces of a store: groups of its verbs, put together in `nightfold.store`."""
