"""Every record stands on a paper that the bibliography holds."""

import pytest

from kspipe.conversions import ALPHA_CO, ATOMIC, EXTINCTION, STAR_FORMATION
from kspipe.core.citations import CITATIONS, Citation, cite
from kspipe.relations import LAWS

RECORDS = [
    record for family in (ATOMIC, ALPHA_CO, EXTINCTION, STAR_FORMATION, LAWS) for record in family
]

# ADS bibcodes of the reference sheet, section 11.
BIBCODES = {
    "bolatto2013": "2013ARA&A..51..207B",
    "calzetti2007": "2007ApJ...666..870C",
    "cardelli1989": "1989ApJ...345..245C",
    "bialy2016": "2016ApJ...822...83B",
    "bigiel2008": "2008AJ....136.2846B",
    "blitz2006": "2006ApJ...650..933B",
    "delosreyes2019": "2019ApJ...872...16D",
    "elmegreen1989": "1989ApJ...338..178E",
    "gnedin2011": "2011ApJ...728...88G",
    "gnedin2014": "2014ApJ...795...37G",
    "kennicutt1998_law": "1998ApJ...498..541K",
    "kim2011": "2011ApJ...743...25K",
    "krumholz2013": "2013MNRAS.436.2747K",
    "leroy2013": "2013AJ....146...19L",
    "mckee2010": "2010ApJ...709..308M",
    "ostriker2010": "2010ApJ...721..975O",
    "polzin2024": "2024ApJ...966..172P",
    "sternberg2014": "2014ApJ...790...10S",
    "krumholz2009": "2009ApJ...699..850K",
    "krumholz2009_fraction": "2009ApJ...693..216K",
    "leroy2008": "2008AJ....136.2782L",
    "leroy2012": "2012AJ....144....3L",
    "leroy2022": "2022ApJ...927..149L",
}


@pytest.mark.parametrize("record", RECORDS, ids=lambda record: record.key)
def test_the_paper_of_each_record_is_known(record) -> None:
    paper = cite(record.cite)
    assert paper.key == record.cite
    assert paper.short
    assert paper.journal


@pytest.mark.parametrize("paper", CITATIONS.values(), ids=lambda paper: paper.key)
def test_a_bibcode_agrees_with_the_printed_reference(paper: Citation) -> None:
    assert CITATIONS[paper.key] is paper
    year = "".join(filter(str.isdigit, paper.key.split("_")[0]))
    assert year in paper.short
    if paper.bibcode:
        # YYYYJJJJJVVVVMPPPPA: 19 characters, dots between (ADS, common practice).
        journal, numbers = paper.journal.rsplit(" ", 2)[0], paper.journal.rsplit(" ", 2)[1:]
        volume, page = numbers[0].rstrip(","), numbers[1]
        assert len(paper.bibcode) == 19
        assert paper.bibcode[:4] == year
        assert paper.bibcode[4:9].rstrip(".") == journal
        assert paper.bibcode[9:13].lstrip(".") == volume
        # A letter before the page of a letter has a place of its own.
        assert paper.bibcode[13] == (page[0] if page[0].isalpha() else ".")
        assert paper.bibcode[14:18].lstrip(".") == page.lstrip("L")
        assert paper.bibcode[18] == paper.short[0]


@pytest.mark.parametrize(("key", "bibcode"), BIBCODES.items())
def test_bibcodes_are_those_of_the_sheet(key: str, bibcode: str) -> None:
    assert cite(key).bibcode == bibcode


def test_an_unknown_key_is_refused() -> None:
    with pytest.raises(KeyError):
        cite("nobody1900")


def test_no_paper_is_listed_twice() -> None:
    bibcodes = [paper.bibcode for paper in CITATIONS.values() if paper.bibcode]
    assert len(set(bibcodes)) == len(bibcodes)
