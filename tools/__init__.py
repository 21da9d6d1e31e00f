"""Programs for working on the project; make calls them."""
