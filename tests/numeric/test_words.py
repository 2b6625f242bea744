"""Sentences of the core that a host can say in another language."""

import pickle

import pytest
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.record_words import of_all
from steadfield.algorithms.numeric.words import Words, joined

GERMAN = {
    "{} of {} records": "{} von {} Datensätzen",
    "{} lie far from {}.": "Weit von {1} liegen {0}.",
    "Only {:.2f} m.": "Nur {:.2f} m.",
}


def german(template):
    return GERMAN.get(template, template)


def test_a_sentence_is_its_english_text():
    words = Words("Only {:.2f} m.", 1.5)
    assert words == "Only 1.50 m."
    assert f"{words} And more." == "Only 1.50 m. And more."
    assert hash(words) == hash("Only 1.50 m.")


def test_a_translation_may_turn_the_order_and_reaches_sentences_inside():
    words = Words("{} lie far from {}.", of_all([True, False]), "Ostermoor")
    assert words.said(german) == "Weit von Ostermoor liegen 1 von 2 Datensätzen."
    assert joined([words, Words("Only {:.2f} m.", 2)]).said(german).endswith("Nur 2.00 m.")


def test_braces_in_names_and_in_sentences_without_values_stay():
    assert Words("odd {name}").said(german) == "odd {name}"
    assert Words("Only {} and {}", "{0}", "{}").said(german) == "Only {0} and {}"
    assert str(InputError("layer {a}: nothing")) == "layer {a}: nothing"


def test_a_template_filled_later_is_the_sentence_made_at_once():
    assert Words("{} of {} records").filled(1, 2).said(german) == "1 von 2 Datensätzen"


@pytest.mark.parametrize("protocol", range(2, pickle.HIGHEST_PROTOCOL + 1))
def test_sentence_and_error_arrive_whole_from_a_worker(protocol):
    error = InputError("{} lie far from {}.", Words("Only {:.2f} m.", 3), 7)
    arrived = pickle.loads(pickle.dumps(error, protocol))
    assert str(arrived) == "Only 3.00 m. lie far from 7."
    assert arrived.words.said(german) == "Weit von 7 liegen Nur 3.00 m.."
