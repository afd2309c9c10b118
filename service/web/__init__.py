"""HTTP: blueprints by resource, problem details, keys and roles."""
