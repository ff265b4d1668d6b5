"""Results -> what a person sees: figures and tables as data, and the sentences beside them."""
