"""The links and the soft plant against stacks that aren't ours; ``tests/interop/install`` fetches them."""
