"""Pictures: free functions of a prototype, a report, an activity, a search."""
