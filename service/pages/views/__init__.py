"""What a page shows of the domain: values for templates and drawings."""
