"""Targets that many tests ask for."""

OCTYL_GLUCOSIDE = "CCCCCCCCO[C@@H]1O[C@H](COC(C)=O)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O"
PENTENYL_LACTOSIDE = (
    "C=CCCCO[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)[C@H](O)[C@H]1O"
)
# The tests' worker (tests/services/worker_app.py) dies of the one and hangs in the other.
CRASHING = "CCCCCCCCCCCCCO[C@@H]1O[C@H](COC(C)=O)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O"
HANGING = "CCCCCCCCCCCCCCO[C@@H]1O[C@H](COC(C)=O)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O"
