"""How annotations are checked at run time: a whole number will do where a float is asked."""

from beartype import BeartypeConf, beartype

checked = beartype(conf=BeartypeConf(is_pep484_tower=True))
