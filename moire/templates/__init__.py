"""Report pages and figure templates."""
