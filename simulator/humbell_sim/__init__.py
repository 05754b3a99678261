"""Makes synthetic signals of faulty machines whose truth is known."""

__all__: list[str] = []
