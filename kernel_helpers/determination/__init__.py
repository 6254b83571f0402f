"""What the analyst gets in hand: states, elements, the stages of a preliminary orbit and its candidates."""
