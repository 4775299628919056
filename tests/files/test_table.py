"""Tables of frequency responses: names, units, separators, decimal commas, and refusals by line and column."""

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from realize import files
from realize.errors import InputError, Refused
from realize.files.table_names import ROLES, parse
from realize.files.table_text import scaled

MEASURED = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"


@pytest.fixture
def table(tmp_path):
    def read(text, columns=None, encoding="utf-8"):
        path = tmp_path / "table.csv"
        path.write_bytes(text if isinstance(text, bytes) else text.encode(encoding))
        return files.read(path, columns=columns)

    return read


@pytest.mark.parametrize(
    ("name", "role", "unit", "label"),
    [
        ("frequency_hz", "frequency", "hz", ""),
        ("Frequency [kHz]", "frequency", "khz", ""),
        ("f (MHz)", "frequency", "mhz", ""),
        ("freq/GHz", "frequency", "ghz", ""),
        ("omega", "frequency", "rad/s", ""),
        ("w [rad/s]", "frequency", "rad/s", ""),
        ("frequency_rad_s", "frequency", "rad/s", ""),
        ("Frequency (rad/sec)", "frequency", "rad/s", ""),
        ("GHz", "frequency", "ghz", ""),
        ("Hz", "frequency", "hz", ""),
        ("FREQUENCY", "frequency", "", ""),
        ("omega [Hz]", "", "", ""),
        ("Re.", "real", "", ""),
        ("Im.", "imaginary", "", ""),
        ("Log(Mg.)", "magnitude", "db", ""),
        ("Ph.", "phase", "", ""),
        ("point1_real", "real", "", "point1"),
        ("point1_imag", "imaginary", "", "point1"),
        ("real_point1", "real", "", "point1"),
        ("Re(G)", "real", "", "G"),
        ("ReS11", "real", "", "S11"),
        ("y1/u2 real", "real", "", "y1/u2"),
        ("Magnitude (dB)", "magnitude", "db", ""),
        ("mag_dB", "magnitude", "db", ""),
        ("gain", "magnitude", "", ""),
        ("dB", "magnitude", "db", ""),
        ("Phase [°]", "phase", "deg", ""),
        ("phase_deg", "phase", "deg", ""),
        ("Phase (rad)", "phase", "rad", ""),
        ("y_phase_deg", "phase", "deg", "y"),
        ("Real [m/N]", "real", "", ""),
        ("Real (V)", "real", "", ""),
        ("coherence", "coherence", "", ""),
        ("out_std", "deviation", "", "out"),
        ("standard deviation", "deviation", "", ""),
        ("-", "skip", "", ""),
        ("skip", "skip", "", ""),
        ("temperature", "", "", ""),
        ("real_hz", "", "", ""),
        ("", "", "", ""),
    ],
)
def test_names_of_columns(name, role, unit, label):
    column = parse(name)
    assert (column.role, column.unit, column.label) == (role, unit, label)


def test_every_word_of_every_role_is_recognised():
    for role, words in ROLES.items():
        for word in words:
            assert parse(word).role == role, word
            assert parse(word.upper()).role == role, word


EXPECTED = np.array([[1 + 2j], [-3 + 0.5j]])


@pytest.mark.parametrize(
    "text",
    [
        "frequency_hz,real,imaginary\n10,1,2\n20,-3,.5\n",
        "frequency_hz,real,imaginary\r\n10,1,2\r\n20,-3,.5\r\n",
        "\ufefffrequency_hz,real,imaginary\r10,1,2\r20,-3,.5",
        "# remark\n\n# another\nfrequency_hz;real;imaginary\n10;1;2\n20;-3;0,5\n",
        "f_hz\tre\tim\n10\t1,0\t2,0\n20\t-3\t5e-1\n".replace("5e-1", "5,0E-1"),
        "f_hz re im\n10 1,0 2\n20 -3 ,5\n",
        "f_hz, re, im\n10, 1.0, 2\n20, -3, 0.5\n",
        "f_khz re im\n  0.01   1.0  2\n 0.02  -3  0.5\n",
        "Frequency [kHz] Real Imag\n0.01 1 2\n0.02 -3 0.5\n",
        "% Hz Re. Im.\n10 1 2\n20 -3 0.5\n",
        '"frequency_hz","real","imaginary"\n"10","1","2"\n"20","-3","0.5"\n',
        '"f [Hz]","re","im"\n"10","1,0","2,0"\n"20","-3,0","0,5"\n',
        "f,re,im\nHz,V,V\n10,1,2\n20,-3,0.5\n",
        "imag,real,freq/Hz\n.5,-3,20\n2,1,10\n",
        "f_hz,re,im,\n10,1,2,\n20,-3,0.5,\n",
        "! f_hz re im\n1.0D+01 1 2\n2.0d1 -3 0.5\n",
    ],
)
def test_spellings_of_one_table(table, text):
    model = table(text)
    assert model.frequency.tolist() == [10, 20]
    assert model.frequency_unit == "Hz"
    assert np.array_equal(model.response[:, 0], EXPECTED)
    assert not model.time.sampled


def test_other_encodings(table):
    text = "f_hz,mag_db,phase [°]\n10,0,90\n"
    for encoding in ("utf-8", "utf-16", "latin-1", "utf-8-sig"):
        assert table(text, encoding=encoding).response.tolist() == [[[1j]]]


def test_magnitude_and_phase(table):
    assert table("f_hz,mag,phase_deg\n1,2,90\n2,2,-180\n3,1,360\n").response.ravel().tolist() == [2j, -2, 1]
    assert table("f_hz,mag_db,phase_rad\n1,20,0\n").response.tolist() == [[[10]]]
    assert np.allclose(table("f_hz,mag_db,phase\n1,20,1\n").response, 10 * np.exp(1j * np.pi / 180), rtol=1e-15)
    assert table("f_hz,mag,phase\n1,1,0\n2,1,90\n").response[1, 0, 0] == 1j
    with pytest.raises(InputError, match="phase_deg or phase_rad"):
        table("f_hz,mag,phase\n1,1,0.5\n")
    with pytest.raises(InputError, match=r"line 2, column 2 \(mag\): '-20'; expected .*dB"):
        table("f_hz,mag,phase_deg\n1,-20,0.5\n")
    both = table("GHz Re. Im. Log(Mg.) Ph.\n1 0.5 0 -6 0\n")
    assert both.response.tolist() == [[[0.5]]]


def test_channels(table):
    model = table("f_hz,a_re,a_im,b_re,b_im\n1,1,2,3,4\n")
    assert [signal.name for signal in model.outputs] == ["a", "b"]
    assert model.response.tolist() == [[[1 + 2j], [3 + 4j]]]
    model = table("f_hz,y1/u1_re,y1/u1_im,y1/u2_re,y1/u2_im,y1/u1_coherence,y1/u2_coherence\n1,1,2,3,4,.5,1\n")
    assert model.shape == (1, 2)
    assert [signal.name for signal in model.inputs] == ["u1", "u2"]
    assert model.coherence.tolist() == [[[0.5, 1.0]]]
    with pytest.raises(InputError, match="output 'y2' and input 'u1'"):
        table("f_hz,y1/u1_re,y1/u1_im,y1/u2_re,y1/u2_im,y2/u2_re,y2/u2_im\n1,1,2,3,4,5,6\n")
    with pytest.raises(InputError, match="no deviation for the channel 'b'"):
        table("f_hz,a_re,a_im,b_re,b_im,a_std\n1,1,2,3,4,5\n")


def test_frequencies_are_scaled_in_decimal(table):
    assert table("f_ghz,re,im\n3.9,1,1\n").frequency[0] == 3.9e9
    assert scaled("3.98732331", 9) == 3987323310.0
    assert scaled("1.1e-3", 3) == 1.1
    assert table("omega,re,im\n0,1,0\n1,2,3\n").frequency_unit == "rad/s"


@given(st.integers(1, 10**15), st.integers(-20, 20), st.sampled_from([3, 6, 9]))
def test_scaling_is_correctly_rounded(digits, exponent, power):
    assert scaled(f"{digits}e{exponent}", power) == float(f"{digits}e{exponent + power}")


def test_names_given_by_the_caller(table):
    names = ["frequency_khz", "-", "real", "imaginary"]
    for text in ("1,9,2,3\n", "a,b,c,d\n1,9,2,3\n"):
        model = table(text, names)
        assert model.frequency.tolist() == [1000] and model.response.tolist() == [[[2 + 3j]]]
    with pytest.raises(InputError, match="--columns: 2 names for 4 columns"):
        table("1,2,3,4\n", ["f_hz", "re"])
    with pytest.raises(InputError, match="--columns, column 2: the name 'x'"):
        table("1,2,3\n", ["f_hz", "x", "re"])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("1,2,3\n2,3,4\n", "--columns frequency_hz,real,imaginary"),
        ("1,2,3,4,5\n", "--columns frequency_hz,y1_real,y1_imaginary,y2_real,y2_imaginary"),
        ("f_hz,re,im\n1,2,3\n2,nan,3\n", "line 3, column 2 (re): 'nan'"),
        ("f_hz,re,im\n1,2,3\n2,3,-inf\n", "line 3, column 3 (im): '-inf'"),
        ("f_hz,re,im\n1,2,3\n2,,3\n", "line 3, column 2 (re): no value"),
        ("f_hz,re,im\n1,2,3\n2,1e999,3\n", "line 3, column 2 (re): '1e999'"),
        ("f_hz,re,im\n1,2,3\n2,1_0,3\n", "line 3, column 2 (re): '1_0'"),
        ("f_hz,re,im\n1,2,3\n2,x,3\n", "line 3, column 2 (re): 'x'"),
        ("f_hz,re,im\n1,2,3\n2,3\n", "line 3: 2 columns; expected 3, as in line 2"),
        ("f_hz,re,im\n1,2,3\n\n1,2,4\n", "in lines 2 and 4"),
        ("f_hz,re,im\n-1,2,3\n", "line 2, column 1 (f_hz): -1.0"),
        ("f_hz,re,im\n1,5,2,5,3,5\n", "3 names for 6 columns"),
        ("f_hz;re;im\n1;2,5;3.5\n", "the decimal comma in '2,5' and the point in '3.5'"),
        ("f_hz;re;im\n1;1.234,5;3\n", "decimal comma"),
        ("f;re;im\n1;2;3\n", "frequency_hz or frequency_rad/s"),
        ("f_hz,re,re,im\n1,2,3,4\n", "two columns for the real"),
        ("f_hz,re,temperature\n1,2,3\n", "line 1, column 3: the name 'temperature'"),
        ("f_hz,re\n1,2\n", "not complete"),
        ("re,im\n1,2\n", "no column of frequencies"),
        ("f_hz,re,im,coh\n1,2,3,1.5\n", "line 2, column 4 (coh): 1.5"),
        ("f_hz,re,im,std\n1,2,3,-1\n", "line 2, column 4 (std): -1.0"),
        ("f_hz,mag_db,phase_deg\n1,7000,0\n", "decibels within the doubles"),
        ("f_hz,re,im\n", "no line of numbers"),
        ("f_hz\n", "no line of numbers"),
        ('# realize {"time": {"domain": "sampled", "period": 0}}\nf_hz,re,im\n1,2,3\n', "period"),
        ("# realize {rubbish}\nf_hz,re,im\n1,2,3\n", "not JSON"),
    ],
)
def test_refusals(table, text, words):
    with pytest.raises(InputError) as caught:
        table(text)
    assert words in str(caught.value)
    assert caught.value.file.endswith("table.csv")


def test_too_many_lines(table, monkeypatch):
    monkeypatch.setattr("realize.files.table_text.MAX_LINES", 100)
    with pytest.raises(Refused, match="more than 100 lines"):
        table("f_hz,re,im\n" + "".join(f"{k},1,2\n" for k in range(200)))


ALPHABET = st.text(st.sampled_from('0123456789.,;\t "-+eEfhzrimn#%\n\r'), max_size=80)


@settings(max_examples=150, deadline=None, suppress_health_check=list(HealthCheck))
@given(ALPHABET, st.sampled_from(["", "f_hz,re,im\n1,2,3\n", "f_hz;re;im\n"]), st.booleans())
def test_random_tables_are_read_or_refused(tmp_path_factory, text, start, named):
    path = tmp_path_factory.getbasetemp() / "random.csv"
    path.write_text(start + text)
    try:
        model = files.read(path, columns=["f_hz", "re", "im"] if named else None)
        assert np.isfinite(model.response).all()
    except (InputError, Refused):
        pass
    except Exception as error:
        assert type(error).__name__ == "UsageError", error  # the text was taken for JSON


@pytest.mark.skipif(not MEASURED.is_dir(), reason="measured data are not beside the project")
def test_measured_tables():
    mechanical = files.read(MEASURED / "mechanical_points_1_to_3.csv")
    assert mechanical.shape == (3, 1) and mechanical.frequency.size == 1001
    assert mechanical.response[1, 2, 0] == 0.010496299469543217 - 0.0970558419720156j
    assert [signal.name for signal in mechanical.outputs] == ["point1", "point2", "point3"]
    battery = MEASURED / "EIS_battery_exampleData.csv"
    with pytest.raises(InputError, match="--columns frequency_hz,real,imaginary"):
        files.read(battery)
    spectrum = files.read(battery, columns=["frequency_hz", "real", "imaginary"])
    assert spectrum.frequency.size == 66 and spectrum.response[0, 0, 0].real == 4.949989776405060160e-02
    resonator = files.read(MEASURED / "NPL_MAT58_Figure6b.txt")
    assert resonator.frequency.size == 201 and resonator.frequency[0] == 3987323310.0
    assert resonator.response[0, 0, 0] == 0.0044849 + 0.0015345j
    other = files.read(MEASURED / "NPL_MAT58_Figure23.txt")
    assert other.response[0, 0, 0] == 0.001970008 - 0.000430850j
