"""The page for people who watch: rendered here, styled by us, with no other host involved."""
