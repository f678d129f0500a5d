"""Where a key stands: the number that an editor shows."""

import tomllib

from hypothesis import given
from hypothesis import strategies as st

from tfstats.plan_file.line_numbers import line_of, lines_of_keys

TEXT = '''# a comment with [brackets] and a = sign
[study]
name = "a [b] = c"
note = """
[input]
files = "not a key"
"""
columns = [
  "memory",   # one
  ["x = y"],
]
[input.recode."trial kind"]
'1' = "recalled"
a.b = 3
[[contrast]]
name = "first"
test = { times = [0, 1],
}
[contrast.test.deep]
alpha = 1
[[contrast]]
name = "second"
'''


def test_lines():
    assert lines_of_keys(TEXT) == {
        ("study",): 2,
        ("study", "name"): 3,
        ("study", "note"): 4,
        ("study", "columns"): 8,
        ("input", "recode", "trial kind"): 12,
        ("input", "recode", "trial kind", "1"): 13,
        ("input", "recode", "trial kind", "a", "b"): 14,
        ("contrast", 0): 15,
        ("contrast", 0, "name"): 16,
        ("contrast", 0, "test"): 17,
        ("contrast", 0, "test", "deep"): 19,
        ("contrast", 0, "test", "deep", "alpha"): 20,
        ("contrast", 1): 21,
        ("contrast", 1, "name"): 22,
    }


def test_closest_line():
    lines = lines_of_keys(TEXT)
    assert line_of(("contrast", 0, "test", "times"), lines) == 17
    assert line_of(("contrast", 1, "first"), lines) == 21
    assert line_of(("contrast",), lines) == 15
    assert line_of(("nowhere",), lines) is None


names = st.text("abcdefgh", min_size=1, max_size=4)
values = st.sampled_from(["1", '"[x]"', "[1,\n 2]", '"""\n[no]\nkey = 1\n"""', "'#'", "{ a = [1], b = '}' }", "[\n]  # ]"])


@given(st.dictionaries(names, st.dictionaries(names, values, max_size=4), max_size=4))
def test_every_key_is_found_where_it_was_written(tables):
    written, expected = [], {}
    for table, keys in tables.items():
        written.append(f"[{table}]")
        expected[(table,)] = "\n".join(written).count("\n") + 1
        for key, value in keys.items():
            written.append(f"{key} = {value}")
            expected[(table, key)] = "\n".join(written[:-1]).count("\n") + 2
    text = "\n".join(written)
    assert {table: set(keys) for table, keys in tomllib.loads(text).items()} == {t: set(k) for t, k in tables.items()}
    assert lines_of_keys(text) == expected
