"""Hot arithmetic: compiled fills of arrays given by the caller. Inputs first, outputs last, no allocation."""
