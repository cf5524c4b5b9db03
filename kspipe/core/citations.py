"""The papers that the records stand on: one entry each, data only."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["CITATIONS", "Citation", "cite"]


@dataclass(frozen=True)
class Citation:
    """One paper.

    Attributes
    ----------
    key : str
        The key that records use, ``author2012``.
    short : str
        As it stands in running text.
    journal : str
        Journal, volume, page.
    bibcode : str
        The ADS bibcode, or empty where it was not confirmed.
    """

    key: str
    short: str
    journal: str
    bibcode: str = ""

    def __str__(self) -> str:
        return f"{self.short}, {self.journal}"


def _citations(*entries: Citation) -> dict[str, Citation]:
    return {entry.key: entry for entry in entries}


CITATIONS = _citations(
    Citation("accurso2017", "Accurso et al. 2017", "MNRAS 470, 4750", "2017MNRAS.470.4750A"),
    Citation("amorin2016", "Amorin et al. 2016", "A&A 588, A23"),
    Citation("asplund2009", "Asplund et al. 2009", "ARA&A 47, 481", "2009ARA&A..47..481A"),
    Citation("bianchi2017", "Bianchi et al. 2017", "ApJS 230, 24", "2017ApJS..230...24B"),
    Citation(
        "bolatto2013", "Bolatto, Wolfire & Leroy 2013", "ARA&A 51, 207", "2013ARA&A..51..207B"
    ),
    Citation("calzetti2000", "Calzetti et al. 2000", "ApJ 533, 682"),
    Citation("calzetti2007", "Calzetti et al. 2007", "ApJ 666, 870", "2007ApJ...666..870C"),
    Citation(
        "cardelli1989", "Cardelli, Clayton & Mathis 1989", "ApJ 345, 245", "1989ApJ...345..245C"
    ),
    Citation("engelbracht2007", "Engelbracht et al. 2007", "PASP 119, 994"),
    Citation("chabrier2003", "Chabrier 2003", "PASP 115, 763"),
    Citation("curti2017", "Curti et al. 2017", "MNRAS 465, 1384", "2017MNRAS.465.1384C"),
    Citation("curti2020", "Curti et al. 2020", "MNRAS 491, 944", "2020MNRAS.491..944C"),
    Citation("dale2002", "Dale & Helou 2002", "ApJ 576, 159"),
    Citation("denbrok2021", "Den Brok et al. 2021", "MNRAS 504, 3221", "2021MNRAS.504.3221D"),
    Citation("dopita2016", "Dopita et al. 2016", "Ap&SS 361, 61"),
    Citation("fitzpatrick1999", "Fitzpatrick 1999", "PASP 111, 63", "1999PASP..111...63F"),
    Citation("galametz2013", "Galametz et al. 2013", "MNRAS 431, 1956"),
    Citation("genzel2012", "Genzel et al. 2012", "ApJ 746, 69", "2012ApJ...746...69G"),
    Citation("genzel2015", "Genzel et al. 2015", "ApJ 800, 20", "2015ApJ...800...20G"),
    Citation("gildepaz2007", "Gil de Paz et al. 2007", "ApJS 173, 185"),
    Citation("hao2011", "Hao et al. 2011", "ApJ 741, 124", "2011ApJ...741..124H"),
    Citation("hunt2015", "Hunt et al. 2015", "A&A 583, A114"),
    Citation("kennicutt1998", "Kennicutt 1998", "ARA&A 36, 189", "1998ARA&A..36..189K"),
    Citation("kennicutt2008", "Kennicutt et al. 2008", "ApJS 178, 247"),
    Citation("kennicutt2009", "Kennicutt et al. 2009", "ApJ 703, 1672", "2009ApJ...703.1672K"),
    Citation("kennicutt2012", "Kennicutt & Evans 2012", "ARA&A 50, 531", "2012ARA&A..50..531K"),
    Citation("kroupa2001", "Kroupa 2001", "MNRAS 322, 231"),
    Citation(
        "krumholz2009", "Krumholz, McKee & Tumlinson 2009", "ApJ 699, 850", "2009ApJ...699..850K"
    ),
    Citation(
        "krumholz2009_fraction",
        "Krumholz, McKee & Tumlinson 2009",
        "ApJ 693, 216",
        "2009ApJ...693..216K",
    ),
    Citation("leroy2008", "Leroy et al. 2008", "AJ 136, 2782", "2008AJ....136.2782L"),
    Citation("leroy2011", "Leroy et al. 2011", "ApJ 737, 12"),
    Citation("leroy2012", "Leroy et al. 2012", "AJ 144, 3", "2012AJ....144....3L"),
    Citation("leroy2019", "Leroy et al. 2019", "ApJS 244, 24"),
    Citation("leroy2022", "Leroy et al. 2022", "ApJ 927, 149", "2022ApJ...927..149L"),
    Citation("morrissey2007", "Morrissey et al. 2007", "ApJS 173, 682"),
    Citation("sun2020", "Sun et al. 2020", "ApJ 892, 148"),
    Citation("wright2010", "Wright et al. 2010", "AJ 140, 1868"),
    Citation("marino2013", "Marino et al. 2013", "A&A 559, A114"),
    Citation("murphy2011", "Murphy et al. 2011", "ApJ 737, 67", "2011ApJ...737...67M"),
    Citation("odonnell1994", "O'Donnell 1994", "ApJ 422, 158"),
    Citation(
        "ostriker2010",
        "Ostriker, McKee & Leroy 2010",
        "ApJ 721, 975",
        "2010ApJ...721..975O",
    ),
    Citation("pettini2004", "Pettini & Pagel 2004", "MNRAS 348, L59"),
    Citation("pilyugin2016", "Pilyugin & Grebel 2016", "MNRAS 457, 3678", "2016MNRAS.457.3678P"),
    Citation("remyruyer2014", "Remy-Ruyer et al. 2014", "A&A 563, A31"),
    Citation("rieke2009", "Rieke et al. 2009", "ApJ 692, 556"),
    Citation("saintonge2017", "Saintonge et al. 2017", "ApJS 233, 22"),
    Citation("salpeter1955", "Salpeter 1955", "ApJ 121, 161"),
    Citation("sanchez2019", "Sanchez et al. 2019", "MNRAS 484, 3042", "2019MNRAS.484.3042S"),
    Citation("sandstrom2013", "Sandstrom et al. 2013", "ApJ 777, 5"),
    Citation("schinnerer2024", "Schinnerer & Leroy 2024", "ARA&A 62, 369"),
    Citation("schlafly2011", "Schlafly & Finkbeiner 2011", "ApJ 737, 103", "2011ApJ...737..103S"),
    Citation("schruba2012", "Schruba et al. 2012", "AJ 143, 138"),
    Citation("wolfire2010", "Wolfire, Hollenbach & McKee 2010", "ApJ 716, 1191"),
    Citation("wyder2007", "Wyder et al. 2007", "ApJS 173, 293"),
    Citation("bertoldi1992", "Bertoldi & McKee 1992", "ApJ 395, 140"),
    Citation("bialy2016", "Bialy & Sternberg 2016", "ApJ 822, 83", "2016ApJ...822...83B"),
    Citation("bonnor1956", "Bonnor 1956", "MNRAS 116, 351"),
    Citation("ebert1955", "Ebert 1955", "Zeitschrift fuer Astrophysik 37, 217"),
    Citation("federrath2012", "Federrath & Klessen 2012", "ApJ 761, 156", "2012ApJ...761..156F"),
    Citation("hennebelle2011", "Hennebelle & Chabrier 2011", "ApJ 743, L29", "2011ApJ...743L..29H"),
    Citation("heyer2004", "Heyer & Brunt 2004", "ApJ 615, L45", "2004ApJ...615L..45H"),
    Citation("jeans1902", "Jeans 1902", "Phil. Trans. R. Soc. A 199, 1"),
    Citation("krumholz2005", "Krumholz & McKee 2005", "ApJ 630, 250", "2005ApJ...630..250K"),
    Citation("krumholz2011", "Krumholz, Leroy & McKee 2011", "ApJ 731, 25", "2011ApJ...731...25K"),
    Citation("krumholz2013", "Krumholz 2013", "MNRAS 436, 2747", "2013MNRAS.436.2747K"),
    Citation("padoan2011", "Padoan & Nordlund 2011", "ApJ 730, 40", "2011ApJ...730...40P"),
    Citation("padoan2012", "Padoan, Haugbolle & Nordlund 2012", "ApJ 759, L27"),
    Citation("solomon1987", "Solomon et al. 1987", "ApJ 319, 730", "1987ApJ...319..730S"),
    Citation("sternberg2014", "Sternberg et al. 2014", "ApJ 790, 10", "2014ApJ...790...10S"),
    Citation("yajima2021", "Yajima et al. 2021", "PASJ 73, 257"),
    Citation("mckee2010", "McKee & Krumholz 2010", "ApJ 709, 308", "2010ApJ...709..308M"),
    Citation("krumholz2012", "Krumholz, Dekel & McKee 2012", "ApJ 745, 69"),
    Citation("krumholz2013", "Krumholz 2013", "MNRAS 436, 2747", "2013MNRAS.436.2747K"),
    Citation("sternberg2014", "Sternberg et al. 2014", "ApJ 790, 10", "2014ApJ...790...10S"),
    Citation("bialy2016", "Bialy & Sternberg 2016", "ApJ 822, 83", "2016ApJ...822...83B"),
    Citation("gnedin2011", "Gnedin & Kravtsov 2011", "ApJ 728, 88", "2011ApJ...728...88G"),
    Citation("gnedin2014", "Gnedin & Draine 2014", "ApJ 795, 37", "2014ApJ...795...37G"),
    Citation("gnedin2016", "Gnedin & Draine 2016 (erratum to 2014)", "ApJ 830, 54"),
    Citation("polzin2024", "Polzin et al. 2024", "ApJ 966, 172", "2024ApJ...966..172P"),
    Citation("elmegreen1989", "Elmegreen 1989", "ApJ 338, 178", "1989ApJ...338..178E"),
    Citation("blitz2006", "Blitz & Rosolowsky 2006", "ApJ 650, 933", "2006ApJ...650..933B"),
    Citation("ostriker2010", "Ostriker, McKee & Leroy 2010", "ApJ 721, 975", "2010ApJ...721..975O"),
    Citation("kim2011", "Kim, Kim & Ostriker 2011", "ApJ 743, 25", "2011ApJ...743...25K"),
    Citation("leroy2013", "Leroy et al. 2013", "AJ 146, 19", "2013AJ....146...19L"),
    Citation("bigiel2008", "Bigiel et al. 2008", "AJ 136, 2846", "2008AJ....136.2846B"),
    Citation("bigiel2011", "Bigiel et al. 2011", "ApJ 730, L13"),
    Citation("kennicutt1998_law", "Kennicutt 1998", "ApJ 498, 541", "1998ApJ...498..541K"),
    Citation(
        "delosreyes2019", "De los Reyes & Kennicutt 2019", "ApJ 872, 16", "2019ApJ...872...16D"
    ),
)


def cite(key: str) -> Citation:
    """Look up one paper.

    Raises
    ------
    KeyError
        If the key is not known; a test resolves the key of each record.
    """
    return CITATIONS[key]
