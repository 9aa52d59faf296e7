"""Text of a record that is made when somebody first reads it: most checks pass, and nobody reads what they say."""

from typing import TYPE_CHECKING, Any


class RenderedWhenRead:
    """Base of a frozen, slotted record with the fields ``renderer`` and ``text``.

    An empty text with a renderer is left out until it is read; then it is rendered once and kept. Whatever reads all
    fields renders it, too: a pickle holds the text, and `dataclasses.replace` hands it on as it stands (given an empty
    text, the new record renders its own).
    """

    __slots__ = ()

    def _await_reader(self) -> None:
        """Leave the text out for the time being; to be called when all fields are set."""
        if self.renderer is not None and not self.text:
            object.__delattr__(self, "text")

    if TYPE_CHECKING:
        renderer: Any
        text: str
    else:  # the type checker would take every misspelt name for one that is found here

        def __getattr__(self, name: str) -> Any:
            # Python asks here only for what it does not find: for a text, once.
            if name != "text":
                raise AttributeError(f"{type(self).__name__!r} object has no attribute {name!r}", name=name, obj=self)
            text = self.renderer(self)
            object.__setattr__(self, "text", text)
            return text
