"""Files of readings as meters and spreadsheets write them, and every mistake in them at once."""

import pytest

from tolsim.spread.readings import parse_readings, read_readings


def read(text, unit="F", **given):
    told = []
    data = text if isinstance(text, bytes) else text.encode()
    found = parse_readings(data, "reel.csv", unit, lambda n, m: told.append((n, m)), **given)
    return found, told


def values(text, unit="F", **given):
    found, told = read(text, unit, **given)
    assert told == []
    return list(found.values)


NANO = pytest.approx([99.8e-9, 100.4e-9, 101e-9])


@pytest.mark.parametrize(
    "text",
    [
        "C [nF]\n99.8\n100.4\n101\n",
        "C [nF]\n99,8\n100,4\n101,0\n",
        "C (nF)\r\n99,8\r\n100,4\r\n101,0\r\n",
        "C in nF\n99.8\n100.4\n101\n",
        "C/nF\n99.8\n100.4\n101\n",
        "99.8 nF\n100.4 nF\n101 nF\n",
        "99,8 nF\n100,4 nF\n101,0 nF\n",
        "0.0998 µF\n0.1004 µF\n0.101 uF\n",
        "piece;C [nF];D\n1;99,8;0,0004\n2;100,4;0,0003\n3;101;0,0005\n",
        "piece\tC [nF]\n1\t99,8\n2\t100,4\n3\t101,0\n",
        "piece,C [nF],D\n1,99.8,0.0004\n2,100.4,0.0003\n3,101,0.0005\n",
        'piece,C [nF]\n1,"99,8"\n2,"100,4"\n3,"101"\n',
        "piece;C;D\n;nF;\n1;99,8;0,0004\n2;100,4;0,0003\n3;101;0,0005\n",
        "# meter at 1 kHz\n// second reel\n\nC [nF]\n99.8\n# a break\n100.4\n\n101\n",
        "\ufeffC [nF]\n99.8\n100.4\n101\n",
        "nr|C [nF]\n1|9.98e1\n2|1.004e2\n3|101\n",
        "piece;C [nF]\n1;99,8\n2;\n3;100,4\n4;n/a\n5;101\n",
        "Date;2026-05-01\nOperator;X\nnr;C [nF]\n1;99,8\n2;100,4\n3;101\n",
        '"C [nF]"\n"99,8"\n"100.4"\n"101"\n',
        "C nF\n99.8\n100.4\n101\n",
        "Cp_nF\n99.8\n100.4\n101\n",
        "nr C_nF\n1 99.8\n2 100.4\n3 101\n",
        "C [pF]\n99.800,0\n100.400,0\n101.000,0\n",
    ],
)
def test_every_way_of_writing_the_same(text):
    assert values(text) == NANO


def test_code_pages_of_older_meters():
    assert values("Stück;C [µF]\n1;0,0998\n2;0,1004\n3;0,101\n".encode("cp1252")) == NANO
    assert values("C [nF]\n99,8\n100,4\n101\n".encode("utf-16")) == NANO


def test_a_counted_column_is_no_decimal_comma():
    assert values("1,99\n2,100\n3,101\n", written_in="nF") == pytest.approx([9.9e-8, 1e-7, 1.01e-7])
    assert values("99,1\n97,2\n98,3\n", written_in="nF") == pytest.approx(
        [99.1e-9, 97.2e-9, 98.3e-9]
    )


def test_the_column_that_measures_the_quantity_is_taken():
    text = "nr;ESR [mohm];C [nF];T [degC]\n1;12;99,8;24\n2;13;100,4;24\n3;12;101;25\n"
    assert values(text) == NANO
    assert values(text, "ohm") == pytest.approx([0.012, 0.013, 0.012])
    assert read(text)[0].column == "C"


def test_a_column_is_named_where_several_fit():
    text = "before [nF];after [nF]\n99,8;97\n100,4;98\n101;99\n"
    found, told = read(text)
    assert found is None
    assert "before, after" in told[0][1].cure
    assert values(text, column="before") == NANO
    _, told = read(text, column="befor")
    assert told[0][1].nearest == "before"


def test_pure_numbers_need_no_unit():
    assert values("k\n0.2\n0.21\n0.19\n", "1") == pytest.approx([0.2, 0.21, 0.19])
    assert values("dev [%]\n-1\n0\n2\n", "1") == pytest.approx([-0.01, 0.0, 0.02])


def test_every_mistake_is_told_with_its_line():
    found, told = read("C\n99.8 nF\nhello\n100.4\n101 V\n102 nF\n3.1 pF\n")
    assert found is None
    assert [line for line, _ in told] == [3, 4, 5, 7]
    got = [mistake.got for _, mistake in told]
    assert got[:2] == ['"hello"', '"100.4"']
    assert "unit" in told[1][1].cure
    assert "Check its unit" in told[3][1].cure


def test_overload_is_no_reading():
    _, told = read("C [nF]\nOL\n99\n98\n")
    assert [(line, mistake.got) for line, mistake in told] == [(2, '"OL"')]


def test_empty_and_missing_files(tmp_path):
    found, told = read("# nothing measured yet\n")
    assert (found, told[0][0]) == (None, 0)
    told = []
    gone = tmp_path / "gone.csv"
    assert read_readings(gone, "F", lambda n, m: told.append((n, m))) is None
    assert "No such file" in told[0][1].got
    binary = tmp_path / "reel.xlsx"
    binary.write_bytes(b"PK\3\4\0\0\0\0" * 40)
    assert read_readings(binary, "F", lambda n, m: told.append((n, m))) is None
    assert "text file" in told[1][1].expected


def test_a_copy_in_utf_8_has_the_same_hash():
    one = read("C [µF]\n0,1\n0,2\n0,3\n".encode("cp1252"))[0]
    assert one.sha256 == read(one.text)[0].sha256
