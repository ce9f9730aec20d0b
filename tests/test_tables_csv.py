"""CSV files: exact numbers, and mistakes named by column and line."""

import re
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from evidence.complaints import DataError, DeclarationError
from evidence.tables import fingerprint, named_arrays, read_data


def write(folder, text, name="litter.csv"):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def equal(left, right):
    """The same names, types, shapes and bits."""
    return list(left) == list(right) and fingerprint(left) == fingerprint(right)


# ---------------------------------------------------------------- CSV, read


def test_csv_gives_each_column_its_type(tmp_path):
    path = write(tmp_path, "days,grams,wet\n0,10.5,True\n30,9.25,False\n")
    data = read_data(path)
    assert {name: column.dtype.name for name, column in data.items()} == {
        "days": "int64",
        "grams": "float64",
        "wet": "bool",
    }
    assert data["days"].tolist() == [0, 30]
    assert data["grams"].tolist() == [10.5, 9.25]
    assert data["wet"].tolist() == [True, False]
    assert data.source == str(path)


@pytest.mark.parametrize(
    "text",
    [
        "\ufeffdays,grams\n1,2.5\n",
        "days, grams \n 1 , 2.5 \n",
        "\n\ndays,grams\r\n\r\n1,2.5\r\n\n",
        '"days","grams"\n"1","2.5"\n',
    ],
)
def test_csv_forgives_what_spreadsheets_add(tmp_path, text):
    data = read_data(write(tmp_path, text))
    assert equal(data, {"days": np.array([1]), "grams": np.array([2.5])})


def test_csv_column_of_whole_numbers_and_others_is_float(tmp_path):
    data = read_data(write(tmp_path, "x\n1\n2.5\n9007199254740993\n"))
    assert data["x"].tolist() == [1.0, 2.5, 9007199254740992.0]


def test_csv_spanning_blocks_keeps_order_type_and_lines(tmp_path, monkeypatch):
    monkeypatch.setattr("evidence.tables.csv_file.BLOCK", 3)
    path = write(tmp_path, "n,x,g\n" + "".join(f"{i},{i},{'ab'[i % 2]}\n" for i in range(10)))
    data = read_data(path, categories=["g"])
    assert data["n"].tolist() == list(range(10))
    assert data["g"].tolist() == [0, 1] * 5
    mixed = write(tmp_path, "x\n" + "".join(f"{i}\n" for i in range(7)) + "7.5\n")
    assert read_data(mixed)["x"].tolist() == [0, 1, 2, 3, 4, 5, 6, 7.5]
    flawed = write(tmp_path, "n,x\n" + "".join(f"{i},{i}\n" for i in range(7)) + "7,\n")
    with pytest.raises(DataError, match="'x' in line 9 is missing"):
        read_data(flawed)


@given(st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1, max_size=20))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
def test_csv_floats_return_to_the_last_bit(tmp_path, values):
    # A float column needs one value with a point, else whole numbers would be int64.
    column = np.array([*values, 0.5])
    path = write(tmp_path, "x\n" + "".join(f"{value!r}\n" for value in column.tolist()))
    assert read_data(path)["x"].tobytes() == column.tobytes()


@given(
    st.integers(1, 12).flatmap(
        lambda rows: st.fixed_dictionaries(
            {
                "whole": hnp.arrays(np.int64, rows),
                "real": hnp.arrays(
                    np.float64, rows, elements=st.floats(allow_nan=False, allow_infinity=False)
                ),
                "truth": hnp.arrays(np.bool_, rows),
            }
        )
    )
)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
def test_dict_to_csv_and_back_is_the_same(tmp_path, columns):
    path = tmp_path / "round.csv"
    pd.DataFrame(columns).to_csv(path, index=False)
    assert equal(read_data(path), named_arrays(columns))


@given(st.lists(st.text("abcXYZ -éß\",'", min_size=1).filter(str.strip), min_size=1, max_size=9))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
def test_categories_of_any_text_return(tmp_path, words):
    path = tmp_path / "words.csv"
    words = [word.strip() for word in words if word.strip().lower() not in ("na", "n/a")] or ["a"]
    pd.DataFrame({"site": words, "n": range(len(words))}).to_csv(path, index=False)
    data = read_data(path, categories=["site"])
    assert [data.labels["site"][code] for code in data["site"]] == words
    assert list(data.labels["site"]) == sorted(set(words))


def test_categories_are_codes_of_the_sorted_labels(tmp_path):
    path = write(tmp_path, "island,nests\nWeir,3\nAlder,5\nWeir,2\n")
    data = read_data(path, categories=["island"])
    assert data["island"].tolist() == [1, 0, 1]
    assert data["island"].dtype == np.int64
    assert data.labels == {"island": ("Alder", "Weir")}


def test_categories_that_are_numbers_are_sorted_as_numbers(tmp_path):
    path = write(tmp_path, "plot,n\n10,1\n9,1\n10,1\n")
    assert read_data(path, categories=["plot"]).labels == {"plot": ("9", "10")}


# ---------------------------------------------------------------- CSV, refused


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", r"litter.csv is empty"),
        ("\n \n", r"litter.csv is empty"),
        ("days,grams\n", r"litter.csv has a header and no rows\."),
        ("days,grams\n1,2\n3\n", r"line 3 of litter.csv must have 2 values.*got 1\."),
        ("days,grams\n1,2\n\n3,4,5\n", r"line 4 of litter.csv must have 2 values.*got 3\."),
        ('a,b\n1,2\n"3\n3",4\n5\n', r"line 5 of litter.csv must have 2 values"),
        ("days,days\n1,2\n", r"litter.csv has two columns named 'days'\. Rename one"),
        (",days\n0,2\n", r"column 1 of litter.csv has no name.*index=False"),
        ("1.5,2\n3,4\n", r"first line of litter.csv must name the columns; got 1.5,2\."),
        ("days;grams\n1;2\n", r"litter.csv must be separated by commas; got 'days;grams'\."),
        ('a,b\n1,"2\n', r"litter.csv cannot be read near line 2.*quotation mark"),
        (b"gr\xe4ser,b\n1,2\n", r"litter.csv is not UTF-8 text.*Save it as CSV UTF-8\."),
        ("a,wet\n1,True\n2,0\n", r"column 'wet' of litter.csv must hold numbers.*Write 0 and 1"),
    ],
)
def test_csv_of_a_wrong_form_is_refused(tmp_path, text, message):
    with pytest.raises(DataError, match=message):
        read_data(write(tmp_path, text))


@pytest.mark.parametrize(
    ("column", "message"),
    [
        ("1\nNA\n3\n", "'x' in line 3 is missing"),
        ("1\n\n3\n", "'x' in line 3 is missing"),
        ("1.5\nnan\n3\n", "'x' in line 3 is missing"),
        ("1.5\n-inf\n3\n", "'x' in line 3 is -inf"),
        ("1.5\n1e400\n3\n", "'x' in line 3 is 1e400"),
        ("1\n2\nabout 3\n4\n", "'x' in line 4 is 'about 3'"),
        ("1\n1_000\n4\n", "'x' in line 3 is '1_000'"),
        ("1\n9223372036854775808\n", "'x' in line 3 is 9223372036854775808, too large for int64"),
        ("True\nNA\n", "'x' in line 3 is missing"),
        ("True\nTrue\nmaybe\n", "'x' in line 4 is 'maybe'"),
    ],
)
def test_csv_values_are_named_by_column_and_line(tmp_path, column, message):
    path = write(tmp_path, "x\n" + column)
    with pytest.raises(
        DataError, match=re.escape(f"litter.csv has a value that cannot be used: {message}")
    ):
        read_data(path)


def test_int64_limits_are_still_read(tmp_path):
    data = read_data(write(tmp_path, "x\n9223372036854775807\n-9223372036854775808\n"))
    assert data["x"].tolist() == [2**63 - 1, -(2**63)]


def test_csv_lines_are_counted_as_a_person_does(tmp_path):
    path = write(tmp_path, 'a,b\n1,2\n\n"3","4"\n\n5,\n')
    with pytest.raises(DataError, match="'b' in line 6 is missing"):
        read_data(path)


def test_many_flaws_are_summarised(tmp_path):
    path = write(tmp_path, "a,b\nNA,1\n2,inf\nNA,3\n4,x\n5,\n")
    with pytest.raises(DataError) as caught:
        read_data(path)
    assert str(caught.value) == (
        "litter.csv has 5 values that cannot be used: 'a' in line 2 is missing, 'a' in line 4 is "
        "missing, 'b' in line 3 is inf (and 2 more). Correct them, or leave those rows out: none "
        "is dropped or filled in silently."
    )


def test_text_is_refused_with_the_line_to_type(tmp_path):
    path = write(tmp_path, "island,n\nWeir,1\nAlder,2\n")
    line = f'read_data("{path}", categories=["island"])'
    with pytest.raises(DataError, match=r"column 'island' of litter.csv is text") as caught:
        read_data(path)
    assert str(caught.value).endswith(f"Type: {line}.")
    assert eval(line)["island"].tolist() == [1, 0]


def test_all_text_columns_enter_the_line_beside_those_given(tmp_path):
    path = write(tmp_path, "a,b,c\nx,y,z\n")
    with pytest.raises(DataError, match=re.escape('categories=["b", "a", "c"])')):
        read_data(path, categories=["b"])


def test_dates_in_text_are_told_from_labels(tmp_path):
    path = write(tmp_path, "day,n\n2024-03-01,1\n2024-03-02,2\n")
    with pytest.raises(DataError, match=r"'day' of litter.csv holds dates.*days since the first"):
        read_data(path)


def test_missing_label_is_named(tmp_path):
    path = write(tmp_path, "island,n\nWeir,1\n,2\nNA,3\n")
    with pytest.raises(DataError, match="'island' in line 3 is missing, 'island' in line 4"):
        read_data(path, categories=["island"])


def test_unknown_category_names_the_near_column(tmp_path):
    path = write(tmp_path, "island,n\nWeir,1\n")
    with pytest.raises(DataError, match=r"columns island, n\. Did you mean 'island'\?"):
        read_data(path, categories=["islnd"])


def test_categories_must_be_a_list(tmp_path):
    path = write(tmp_path, "island,n\nWeir,1\n")
    with pytest.raises(DeclarationError, match=re.escape('Type: categories=["island"].')):
        read_data(path, categories="island")


def test_missing_file_names_its_neighbour(tmp_path):
    write(tmp_path, "a\n1\n")
    with pytest.raises(DataError, match=r"liter.csv does not exist\. Did you mean 'litter.csv'\?"):
        read_data(tmp_path / "liter.csv")
    with pytest.raises(DataError, match=r"a.csv does not exist\.$"):
        read_data(tmp_path / "nowhere" / "a.csv")


def test_folder_and_unknown_suffix_are_refused(tmp_path):
    with pytest.raises(DataError, match="is a folder"):
        read_data(tmp_path)
    with pytest.raises(DataError, match=r"litter.xlsx must be a .csv or .parquet file; got '.xls"):
        read_data(write(tmp_path, "a", "litter.xlsx"))


def test_read_data_of_a_frame_says_what_to_pass():
    with pytest.raises(DataError, match=r"takes the path of a file; got DataFrame.*as it is"):
        read_data(pd.DataFrame({"a": [1]}))


def test_reading_a_csv_file_imports_nothing_heavy(tmp_path):
    path = write(tmp_path, "a\n1\n")
    code = (
        "import sys; from evidence.tables import read_data; read_data(sys.argv[1]);"
        "print([m for m in ('jax', 'pandas', 'xarray', 'pyarrow') if m in sys.modules])"
    )
    run = subprocess.run(
        [sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=True
    )
    assert run.stdout.strip() == "[]"
