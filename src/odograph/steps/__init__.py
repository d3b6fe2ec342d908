"""One module per rule: read what the rule names, call the library, write the product."""
