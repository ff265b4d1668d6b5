"""Hold the alpha and nothing else: weights, walk-forward, costs, ticket, book."""
