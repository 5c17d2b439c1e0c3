"""What a notebook shows of an object: a table of facts, as HTML that takes on the page's own look."""
