"""What no log, error or notice may ever hold: a name, a value and a token that the tests plant in their feeds."""

TOKEN = "geheim.0815"
NAME = "Muster-Eleonore"
VALUE = 45.37
SECRETS = (NAME, str(VALUE), TOKEN)
