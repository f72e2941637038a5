"""Published methods that the screener uses, by citation key, with BibTeX entries.

Keys are the first author's surname and the year, lower case without blanks ("rajpaul2015"). Names of
stars are left out of titles ("...").
"""

# ruff: noqa: E501
# A table: one reference a line reads and compares better than one field a line.

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass

__all__ = ["REFERENCES", "Reference", "bibtex", "cited"]

_ACCENTS = {
    "ó": "{\\'o}",
    "ü": '{\\"u}',
    "á": "{\\'a}",
    "é": "{\\'e}",
    "ñ": "{\\~n}",
    "–": "--",
    "&": "\\&",
}


@dataclass(frozen=True)
class Reference:
    """A published method.

    Attributes
    ----------
    key : str
        Citation key.
    authors : str
        Authors in BibTeX order, "Surname, Given and Surname, Given"; long lists end in "others".
    journal : str
        Journal, or publisher of a book.
    volume, pages, doi : str
        Empty where not known.
    purpose : str
        What the screener takes from it, as a phrase.
    """

    key: str
    authors: str
    year: int
    title: str
    journal: str
    volume: str = ""
    pages: str = ""
    doi: str = ""
    purpose: str = ""
    book: bool = False

    @property
    def short(self) -> str:
        """Author and year as in running text: "Haywood et al. (2014)"."""
        names = [name.split(",")[0].strip("{}") for name in self.authors.split(" and ")]
        if len(names) > 3 or names[-1] == "others":
            return f"{names[0]} et al. ({self.year})"
        if len(names) == 1:
            return f"{names[0]} ({self.year})"
        return f"{', '.join(names[:-1])} & {names[-1]} ({self.year})"

    @property
    def line(self) -> str:
        """The entry of a reference list in one line."""
        where = ", ".join(part for part in (self.journal, self.volume, self.pages) if part)
        return f"{self.short}. {self.title}. {where}."

    @property
    def bibtex(self) -> str:
        """The BibTeX entry, accents and ampersands escaped."""
        fields = {
            "author": self.authors,
            "title": f"{{{self.title}}}",
            "publisher" if self.book else "journal": self.journal,
            "year": str(self.year),
            "volume": self.volume,
            "pages": self.pages,
            "doi": self.doi,
        }
        body = ",\n".join(f"  {k} = {{{_escaped(v)}}}" for k, v in fields.items() if v)
        return f"@{'book' if self.book else 'article'}{{{self.key},\n{body}\n}}\n"


def _escaped(text: str) -> str:
    return re.sub("|".join(_ACCENTS), lambda m: _ACCENTS[m.group()], text)


_AA = "Astronomy & Astrophysics"
_MN = "Monthly Notices of the Royal Astronomical Society"
_APJ = "The Astrophysical Journal"

# fmt: off
_ALL = (
    # searching
    Reference("lomb1976", "Lomb, N. R.", 1976, "Least-squares frequency analysis of unequally spaced data", "Astrophysics and Space Science", "39", "447", "", "least-squares periodogram"),
    Reference("scargle1982", "Scargle, J. D.", 1982, "Studies in astronomical time series analysis. II. Statistical aspects of spectral analysis of unevenly spaced data", _APJ, "263", "835", "10.1086/160554", "least-squares periodogram"),
    Reference("zechmeister2009", "Zechmeister, M. and Kürster, M.", 2009, "The generalised Lomb-Scargle periodogram. A new formalism for the floating-mean and Keplerian periodograms", _AA, "496", "577", "10.1051/0004-6361:200811296", "periodogram with floating mean"),
    Reference("baluev2008", "Baluev, R. V.", 2008, "Assessing the statistical significance of periodogram peaks", _MN, "385", "1279", "10.1111/j.1365-2966.2008.12689.x", "analytic false-alarm probability"),
    Reference("baluev2009", "Baluev, R. V.", 2009, "Accounting for velocity jitter in planet search surveys", _MN, "393", "969", "", "likelihood with white jitter"),
    Reference("delisle2020", "Delisle, J.-B. and Hara, N. and Ségransan, D.", 2020, "Efficient modeling of correlated noise. I. Statistical significance of periodogram peaks", _AA, "635", "A83", "", "false-alarm probability in correlated noise"),
    Reference("vanderplas2018", "VanderPlas, J. T.", 2018, "Understanding the Lomb-Scargle periodogram", "The Astrophysical Journal Supplement Series", "236", "16", "10.3847/1538-4365/aab766", "frequency grids and window functions"),
    Reference("deeming1975", "Deeming, T. J.", 1975, "Fourier analysis with unequally-spaced data", "Astrophysics and Space Science", "36", "137", "", "spectral window"),
    Reference("dawson2010", "Dawson, R. I. and Fabrycky, D. C.", 2010, "Radial velocity planets de-aliased ...", _APJ, "722", "937", "10.1088/0004-637X/722/1/937", "telling a period from its aliases"),
    # orbits
    Reference("markley1995", "Markley, F. L.", 1995, "Kepler equation solver", "Celestial Mechanics and Dynamical Astronomy", "63", "101", "10.1007/BF00691917", "solving Kepler's equation"),
    Reference("kipping2013", "Kipping, D. M.", 2013, "Parametrizing the exoplanet eccentricity distribution with the Beta distribution", f"{_MN}: Letters", "434", "L51", "10.1093/mnrasl/slt075", "prior of the eccentricity"),
    Reference("chen2017", "Chen, J. and Kipping, D.", 2017, "Probabilistic forecasting of the masses and radii of other worlds", _APJ, "834", "17", "", "radius from mass"),
    Reference("cumming2008", "Cumming, A. and Butler, R. P. and Marcy, G. W. and others", 2008, "The Keck Planet Search: detectability and the minimum mass and orbital period distribution of extrasolar planets", "Publications of the Astronomical Society of the Pacific", "120", "531", "", "occurrence law of companions' masses"),
    Reference("giles2017", "Giles, H. A. C. and Collier Cameron, A. and Haywood, R. D.", 2017, "A Kepler study of starspot lifetimes with respect to light-curve amplitude and spectral type", _MN, "472", "1618", "", "lifetimes of active regions"),
    Reference("barnes2007", "Barnes, J. W.", 2007, "Effects of orbital eccentricity on extrasolar planet transit detectability and light curves", "Publications of the Astronomical Society of the Pacific", "119", "986", "", "transit probability of eccentric orbits"),
    Reference("ho2011", "Ho, S. and Turner, E. L.", 2011, "The posterior distribution of sin(i) values for exoplanets with M_T sin(i) determined from radial velocity data", _APJ, "739", "26", "", "true mass from the minimum mass"),
    Reference("kolchinsky2017", "Kolchinsky, A. and Tracey, B. D.", 2017, "Estimating mixture entropy with pairwise distances", "Entropy", "19", "361", "", "expected information of a night"),
    Reference("masuda2020", "Masuda, K. and Winn, J. N.", 2020, "On the inference of a star's inclination angle from its rotation velocity and projected rotation velocity", "The Astronomical Journal", "159", "81", "", "inclination of the star"),
    Reference("feng2015", "Feng, Y. K. and Wright, J. T. and Nelson, B. and others", 2015, "The California Planet Survey IV ...", _APJ, "800", "22", "", "a drift as a lower limit on an outer companion"),
    Reference("goodman2010", "Goodman, J. and Weare, J.", 2010, "Ensemble samplers with affine invariance", "Communications in Applied Mathematics and Computational Science", "5", "65", "10.2140/camcos.2010.5.65", "ensemble sampler"),
    Reference("angladaescude2010", "Anglada-Escudé, G. and López-Morales, M. and Chambers, J. E.", 2010, "How eccentric orbital solutions can hide planetary systems in 2:1 resonant orbits", _APJ, "709", "168", "10.1088/0004-637X/709/1/168", "one eccentric planet or two in 2:1"),
    Reference("kurster2015", "Kürster, M. and Trifonov, T. and Reffert, S. and Kostogryz, N. M. and Rodler, F.", 2015, "Disentangling 2:1 resonant radial velocity orbits from eccentric ones ...", _AA, "577", "A103", "10.1051/0004-6361/201525872", "one eccentric planet or two in 2:1"),
    Reference("gladman1993", "Gladman, B.", 1993, "Dynamics of systems of two close planets", "Icarus", "106", "247", "10.1006/icar.1993.1169", "Hill stability"),
    Reference("laskar2017", "Laskar, J. and Petit, A. C.", 2017, "AMD-stability and the classification of planetary systems", _AA, "605", "A72", "10.1051/0004-6361/201630022", "stability by angular momentum deficit"),
    Reference("winn2010", "Winn, J. N.", 2010, "Transits and occultations", "arXiv:1001.2010", purpose="transit probability and duration"),
    # the star
    Reference("aigrain2012", "Aigrain, S. and Pont, F. and Zucker, S.", 2012, "A simple method to estimate radial velocity variations due to stellar activity using photometry", _MN, "419", "3147", "10.1111/j.1365-2966.2011.19960.x", "velocities of spots from photometry"),
    Reference("haywood2014", "Haywood, R. D. and others", 2014, "Planets and stellar activity: hide and seek ...", _MN, "443", "2517", "10.1093/mnras/stu1320", "quasi-periodic Gaussian process of activity"),
    Reference("rajpaul2015", "Rajpaul, V. and Aigrain, S. and Osborne, M. A. and Reece, S. and Roberts, S.", 2015, "A Gaussian process framework for modelling stellar activity signals in radial velocity data", _MN, "452", "2269", "10.1093/mnras/stv1428", "one latent process and its derivative under velocities and indicators"),
    Reference("perger2021", "Perger, M. and others", 2021, "Auto-correlation functions of astrophysical processes, and their relation to Gaussian processes", _AA, "645", "A58", "10.1051/0004-6361/202039594", "quasi-periodic kernel with a half-period cosine"),
    Reference("noyes1984", "Noyes, R. W. and Hartmann, L. W. and Baliunas, S. L. and Duncan, D. K. and Vaughan, A. H.", 1984, "Rotation, convection, and magnetic activity in lower main-sequence stars", _APJ, "279", "763", "10.1086/161945", "rotation from chromospheric activity"),
    Reference("mamajek2008", "Mamajek, E. E. and Hillenbrand, L. A.", 2008, "Improved age estimation for solar-type dwarfs using activity-rotation diagnostics", _APJ, "687", "1264", "10.1086/591785", "rotation from chromospheric activity"),
    Reference("suarezmascareno2015", "Suárez Mascareño, A. and Rebolo, R. and González Hernández, J. I. and Esposito, M.", 2015, "Rotation periods of late-type dwarf stars from time series high-resolution spectroscopy of chromospheric indicators", _MN, "452", "2745", "10.1093/mnras/stv1441", "rotation of late-type dwarfs from activity"),
    Reference("saar1997", "Saar, S. H. and Donahue, R. A.", 1997, "Activity-related radial velocity variation in cool stars", _APJ, "485", "319", "10.1086/304392", "velocity amplitude of spots"),
    Reference("queloz2001", "Queloz, D. and others", 2001, "No planet for ...", _AA, "379", "279", "10.1051/0004-6361:20011308", "bisector against velocity"),
    Reference("boisse2011", "Boisse, I. and others", 2011, "Disentangling between stellar activity and planetary signals", _AA, "528", "A4", "10.1051/0004-6361/201014354", "spots at the rotation and its harmonics"),
    Reference("gregory2016", "Gregory, P. C.", 2016, "An apodized Kepler periodogram for separating planetary and stellar activity signals", _MN, "458", "2604", "10.1093/mnras/stw147", "apodised orbit"),
    Reference("hara2022", "Hara, N. C. and others", 2022, "Testing whether a signal is strictly periodic. Application to disentangling planets and stellar activity in radial velocities", _AA, "658", "A177", "", "apodised orbit"),
    Reference("mortier2017", "Mortier, A. and Collier Cameron, A.", 2017, "Stacked Bayesian general Lomb-Scargle periodogram: Identifying stellar activity signals", _AA, "601", "A110", "10.1051/0004-6361/201630201", "growth of significance with data"),
    # statistics
    Reference("rasmussen2006", "Rasmussen, C. E. and Williams, C. K. I.", 2006, "Gaussian Processes for Machine Learning", "MIT Press", purpose="Gaussian processes", book=True),
    Reference("ambikasaran2015", "Ambikasaran, S. and Foreman-Mackey, D. and Greengard, L. and Hogg, D. W. and O'Neil, M.", 2015, "Fast direct methods for Gaussian processes", "IEEE Transactions on Pattern Analysis and Machine Intelligence", "38", "252", "10.1109/TPAMI.2015.2448083", "Gaussian-process solver (george)"),
    Reference("foremanmackey2017", "Foreman-Mackey, D. and Agol, E. and Ambikasaran, S. and Angus, R.", 2017, "Fast and scalable Gaussian process modeling with applications to astronomical time series", "The Astronomical Journal", "154", "220", "10.3847/1538-3881/aa9332", "semi-separable solver for long series"),
    Reference("nelson2020", "Nelson, B. E. and others", 2020, "Quantifying the Bayesian evidence for a planet in radial velocity data", "The Astronomical Journal", "159", "73", "10.3847/1538-3881/ab5190", "priors and comparison of evidences"),
    Reference("kass1995", "Kass, R. E. and Raftery, A. E.", 1995, "Bayes factors", "Journal of the American Statistical Association", "90", "773", "10.1080/01621459.1995.10476572", "reading of Bayes factors"),
    Reference("theiler1992", "Theiler, J. and Eubank, S. and Longtin, A. and Galdrikian, B. and Farmer, J. D.", 1992, "Testing for nonlinearity in time series: the method of surrogate data", "Physica D", "58", "77", "10.1016/0167-2789(92)90102-S", "surrogates that keep the autocorrelation"),
    Reference("phipson2010", "Phipson, B. and Smyth, G. K.", 2010, "Permutation p-values should never be zero: calculating exact p-values when permutations are randomly drawn", "Statistical Applications in Genetics and Molecular Biology", "9", "39", "10.2202/1544-6115.1585", "p-values from resamples"),
    Reference("brown1975", "Brown, M. B.", 1975, "A method for combining non-independent, one-sided tests of significance", "Biometrics", "31", "987", "10.2307/2529826", "one p-value from correlated indicators"),
    Reference("benjamini1995", "Benjamini, Y. and Hochberg, Y.", 1995, "Controlling the false discovery rate: a practical and powerful approach to multiple testing", "Journal of the Royal Statistical Society, Series B", "57", "289", "10.1111/j.2517-6161.1995.tb02031.x", "many tests at once"),
    Reference("clopper1934", "Clopper, C. J. and Pearson, E. S.", 1934, "The use of confidence or fiducial limits illustrated in the case of the binomial", "Biometrika", "26", "404", "10.1093/biomet/26.4.404", "binomial intervals"),
    Reference("gneiting2007", "Gneiting, T. and Raftery, A. E.", 2007, "Strictly proper scoring rules, prediction, and estimation", "Journal of the American Statistical Association", "102", "359", "10.1198/016214506000001437", "log score of predictions"),
    # software
    Reference("astropy2022", "{Astropy Collaboration}", 2022, "The Astropy Project: sustaining and growing a community-oriented open-source project and the latest major release (v5.0) of the core package", _APJ, "935", "167", "10.3847/1538-4357/ac7c74", "tables, units and constants"),
    Reference("harris2020", "Harris, C. R. and others", 2020, "Array programming with NumPy", "Nature", "585", "357", "10.1038/s41586-020-2649-2", "arrays"),
    Reference("virtanen2020", "Virtanen, P. and others", 2020, "SciPy 1.0: fundamental algorithms for scientific computing in Python", "Nature Methods", "17", "261", "10.1038/s41592-019-0686-2", "linear algebra and optimisers"),
    Reference("hunter2007", "Hunter, J. D.", 2007, "Matplotlib: a 2D graphics environment", "Computing in Science & Engineering", "9", "90", "10.1109/MCSE.2007.55", "figures"),
    Reference("foremanmackey2013", "Foreman-Mackey, D. and Hogg, D. W. and Lang, D. and Goodman, J.", 2013, "emcee: the MCMC hammer", "Publications of the Astronomical Society of the Pacific", "125", "306", "10.1086/670067", "ensemble sampler"),
    Reference("rein2012", "Rein, H. and Liu, S.-F.", 2012, "REBOUND: an open-source multi-purpose N-body code for collisional dynamics", _AA, "537", "A128", "10.1051/0004-6361/201118085", "N-body integration"),
)
# fmt: on

REFERENCES: dict[str, Reference] = {item.key: item for item in _ALL}


def cited(keys: Iterable[str]) -> tuple[Reference, ...]:
    """The references of the given keys, each once, in alphabetical order; unknown keys are left."""
    return tuple(REFERENCES[key] for key in sorted(set(keys)) if key in REFERENCES)


def bibtex(keys: Iterable[str]) -> str:
    """BibTeX entries of the given keys, one after the other."""
    return "\n".join(item.bibtex for item in cited(keys))
