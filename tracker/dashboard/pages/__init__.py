"""The pages: each has pure functions from the store to rows or figures, a layout, and callbacks."""
