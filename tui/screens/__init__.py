"""The rooms of the bench, a module each, and the pages that open on top of them."""
