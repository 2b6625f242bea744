"""Sentences of the core, kept as a template and its values so that a host can translate them."""


class Words(str):
    """A sentence in English that remembers how it was made.

    It is text like any other for whoever wants English; `said` gives it in another language. Text
    made from it by other means, such as ``+``, is English for good.

    Parameters
    ----------
    template : str
        With a pair of braces for each value, as of ``str.format``.
    values : tuple
        Numbers, text, and sentences that are translated in their turn. Without any the template is
        taken as it is, braces and all.
    """

    def __new__(cls, template, *values):
        made = super().__new__(cls, template.format(*values) if values else template)
        made.template, made.values = str(template), values
        return made

    def __getnewargs__(self):
        return (self.template, *self.values)

    def filled(self, *values):
        """The sentence whose template this is, with values in it."""
        return Words(self.template, *values)

    def said(self, translate):
        """The sentence in the language of ``translate``, which takes and gives a template."""
        values = [
            value.said(translate) if isinstance(value, Words) else value for value in self.values
        ]
        template = translate(self.template)
        return template.format(*values) if values else template


def joined(sentences, between=" "):
    """Sentences one after another."""
    return Words(between.join(["{}"] * len(sentences)), *sentences)
