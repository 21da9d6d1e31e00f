"""Targets that many tests ask for."""

OCTYL_GLUCOSIDE = "CCCCCCCCO[C@@H]1O[C@H](COC(C)=O)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O"
