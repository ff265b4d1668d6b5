"""The published sources of every method, by key; a memo cites those it used and no others."""

from __future__ import annotations

from collections.abc import Iterable

from soffit.errors import SettingError, nearest

__all__ = ["SOURCES", "cite", "reference"]

SOURCES: dict[str, str] = {
    "andrews-1993": "Andrews, D. W. K. (1993). Tests for parameter instability and structural change with unknown change point. Econometrica 61(4), 821–856.",
    "bai-saranadasa-1996": "Bai, Z. and Saranadasa, H. (1996). Effect of high dimension: by an example of a two sample problem. Statistica Sinica 6(2), 311–329.",
    "bailey-lopez-de-prado-2012": "Bailey, D. H. and López de Prado, M. (2012). The Sharpe ratio efficient frontier. Journal of Risk 15(2), 3–44.",
    "bailey-lopez-de-prado-2014": "Bailey, D. H. and López de Prado, M. (2014). The deflated Sharpe ratio. Journal of Portfolio Management 40(5), 94–107.",
    "barillas-kan-robotti-shanken-2020": "Barillas, F., Kan, R., Robotti, C. and Shanken, J. (2020). Model comparison with Sharpe ratios. Journal of Financial and Quantitative Analysis 55(6), 1840–1874.",
    "barillas-shanken-2017": "Barillas, F. and Shanken, J. (2017). Which alpha? Review of Financial Studies 30(4), 1316–1338.",
    "barillas-shanken-2018": "Barillas, F. and Shanken, J. (2018). Comparing asset pricing models. Journal of Finance 73(2), 715–754.",
    "benjamini-hochberg-1995": "Benjamini, Y. and Hochberg, Y. (1995). Controlling the false discovery rate. Journal of the Royal Statistical Society B 57(1), 289–300.",
    "benjamini-yekutieli-2001": "Benjamini, Y. and Yekutieli, D. (2001). The control of the false discovery rate in multiple testing under dependency. Annals of Statistics 29(4), 1165–1188.",
    "bonferroni-1936": "Bonferroni, C. E. (1936). Teoria statistica delle classi e calcolo delle probabilità. Pubblicazioni del R. Istituto Superiore di Scienze Economiche e Commerciali di Firenze 8, 3–62.",
    "breeden-gibbons-litzenberger-1989": "Breeden, D. T., Gibbons, M. R. and Litzenberger, R. H. (1989). Empirical tests of the consumption-oriented CAPM. Journal of Finance 44(2), 231–262.",
    "breusch-pagan-1979": "Breusch, T. S. and Pagan, A. R. (1979). A simple test for heteroscedasticity and random coefficient variation. Econometrica 47(5), 1287–1294.",
    "campbell-lo-mackinlay-1997": "Campbell, J. Y., Lo, A. W. and MacKinlay, A. C. (1997). The Econometrics of Financial Markets. Princeton University Press, chapter 5.",
    "cochrane-saa-requejo-2000": "Cochrane, J. H. and Saá-Requejo, J. (2000). Beyond arbitrage: good-deal asset price bounds in incomplete markets. Journal of Political Economy 108(1), 79–119.",
    "cragg-donald-1997": "Cragg, J. G. and Donald, S. G. (1997). Inferring the rank of a matrix. Journal of Econometrics 76(1–2), 223–250.",
    "dahlgran-2009": "Dahlgran, R. A. (2009). The relative performance of in-sample and out-of-sample hedging effectiveness indicators. Proceedings of the NCCC-134 Conference on Applied Commodity Price Analysis, Forecasting, and Market Risk Management, St. Louis.",
    "dimson-1979": "Dimson, E. (1979). Risk measurement when shares are subject to infrequent trading. Journal of Financial Economics 7(2), 197–226.",
    "ederington-1979": "Ederington, L. H. (1979). The hedging performance of the new futures markets. Journal of Finance 34(1), 157–170.",
    "fama-french-1997": "Fama, E. F. and French, K. R. (1997). Industry costs of equity. Journal of Financial Economics 43(2), 153–193.",
    "fama-french-2010": "Fama, E. F. and French, K. R. (2010). Luck versus skill in the cross-section of mutual fund returns. Journal of Finance 65(5), 1915–1947.",
    "fama-french-2015": "Fama, E. F. and French, K. R. (2015). A five-factor asset pricing model. Journal of Financial Economics 116(1), 1–22.",
    "fama-macbeth-1973": "Fama, E. F. and MacBeth, J. D. (1973). Risk, return, and equilibrium: empirical tests. Journal of Political Economy 81(3), 607–636.",
    "getmansky-lo-makarov-2004": "Getmansky, M., Lo, A. W. and Makarov, I. (2004). An econometric model of serial correlation and illiquidity in hedge fund returns. Journal of Financial Economics 74(3), 529–609.",
    "gibbons-ross-shanken-1989": "Gibbons, M. R., Ross, S. A. and Shanken, J. (1989). A test of the efficiency of a given portfolio. Econometrica 57(5), 1121–1152.",
    "hansen-1982": "Hansen, L. P. (1982). Large sample properties of generalized method of moments estimators. Econometrica 50(4), 1029–1054.",
    "hansen-jagannathan-1991": "Hansen, L. P. and Jagannathan, R. (1991). Implications of security market data for models of dynamic economies. Journal of Political Economy 99(2), 225–262.",
    "hochberg-1988": "Hochberg, Y. (1988). A sharper Bonferroni procedure for multiple tests of significance. Biometrika 75(4), 800–802.",
    "hoerl-kennard-1970": "Hoerl, A. E. and Kennard, R. W. (1970). Ridge regression: biased estimation for nonorthogonal problems. Technometrics 12(1), 55–67.",
    "holm-1979": "Holm, S. (1979). A simple sequentially rejective multiple test procedure. Scandinavian Journal of Statistics 6(2), 65–70.",
    "hommel-1988": "Hommel, G. (1988). A stagewise rejective multiple test procedure based on a modified Bonferroni test. Biometrika 75(2), 383–386.",
    "hotelling-1931": "Hotelling, H. (1931). The generalization of Student's ratio. Annals of Mathematical Statistics 2(3), 360–378.",
    "jarque-bera-1987": "Jarque, C. M. and Bera, A. K. (1987). A test for normality of observations and regression residuals. International Statistical Review 55(2), 163–172.",
    "jobson-korkie-1980": "Jobson, J. D. and Korkie, B. (1980). Estimation for Markowitz efficient portfolios. Journal of the American Statistical Association 75(371), 544–554.",
    "jobson-korkie-1981": "Jobson, J. D. and Korkie, B. M. (1981). Performance hypothesis testing with the Sharpe and Treynor measures. Journal of Finance 36(4), 889–908.",
    "johnson-1960": "Johnson, L. L. (1960). The theory of hedging and speculation in commodity futures. Review of Economic Studies 27(3), 139–151.",
    "kan-robotti-shanken-2013": "Kan, R., Robotti, C. and Shanken, J. (2013). Pricing model performance and the two-pass cross-sectional regression methodology. Journal of Finance 68(6), 2617–2649.",
    "kleibergen-paap-2006": "Kleibergen, F. and Paap, R. (2006). Generalized reduced rank tests using the singular value decomposition. Journal of Econometrics 133(1), 97–126.",
    "koenker-1981": "Koenker, R. (1981). A note on studentizing a test for heteroscedasticity. Journal of Econometrics 17(1), 107–112.",
    "lally-1998": "Lally, M. (1998). An examination of Blume and Vasicek betas. Financial Review 33(3), 183–198.",
    "lamont-2001": "Lamont, O. A. (2001). Economic tracking portfolios. Journal of Econometrics 105(1), 161–184.",
    "ledoit-wolf-2008": "Ledoit, O. and Wolf, M. (2008). Robust performance hypothesis testing with the Sharpe ratio. Journal of Empirical Finance 15(5), 850–859.",
    "lewellen-nagel-2006": "Lewellen, J. and Nagel, S. (2006). The conditional CAPM does not explain asset-pricing anomalies. Journal of Financial Economics 82(2), 289–314.",
    "lewellen-nagel-shanken-2010": "Lewellen, J., Nagel, S. and Shanken, J. (2010). A skeptical appraisal of asset pricing tests. Journal of Financial Economics 96(2), 175–194.",
    "lien-2006": "Lien, D. (2006). Estimation bias of futures hedging performance: a note. Journal of Futures Markets 26(8), 835–841.",
    "ljung-box-1978": "Ljung, G. M. and Box, G. E. P. (1978). On a measure of lack of fit in time series models. Biometrika 65(2), 297–303.",
    "lo-2002": "Lo, A. W. (2002). The statistics of Sharpe ratios. Financial Analysts Journal 58(4), 36–52.",
    "mackinlay-1995": "MacKinlay, A. C. (1995). Multifactor models do not explain deviations from the CAPM. Journal of Financial Economics 38(1), 3–28.",
    "mackinnon-white-1985": "MacKinnon, J. G. and White, H. (1985). Some heteroskedasticity-consistent covariance matrix estimators with improved finite sample properties. Journal of Econometrics 29(3), 305–325.",
    "memmel-2003": "Memmel, C. (2003). Performance hypothesis testing with the Sharpe ratio. Finance Letters 1, 21–23.",
    "mertens-2002": "Mertens, E. (2002). Comments on variance of the IID estimator in Lo (2002). Working paper, University of Basel.",
    "modigliani-1997": "Modigliani, F. and Modigliani, L. (1997). Risk-adjusted performance. Journal of Portfolio Management 23(2), 45–54.",
    "newey-west-1987": "Newey, W. K. and West, K. D. (1987). A simple, positive semi-definite, heteroskedasticity and autocorrelation consistent covariance matrix. Econometrica 55(3), 703–708.",
    "newey-west-1994": "Newey, W. K. and West, K. D. (1994). Automatic lag selection in covariance matrix estimation. Review of Economic Studies 61(4), 631–653.",
    "pastor-stambaugh-1999": "Pástor, Ľ. and Stambaugh, R. F. (1999). Costs of equity capital and model mispricing. Journal of Finance 54(1), 67–121.",
    "pastor-stambaugh-2000": "Pástor, Ľ. and Stambaugh, R. F. (2000). Comparing asset pricing models: an investment perspective. Journal of Financial Economics 56(3), 335–381.",
    "pearson-1959": "Pearson, E. S. (1959). Note on an approximation to the distribution of non-central χ². Biometrika 46(3–4), 364.",
    "pesaran-yamagata-2024": "Pesaran, M. H. and Yamagata, T. (2024). Testing for alpha in linear factor pricing models with a large number of securities. Journal of Financial Econometrics 22(2), 407–460.",
    "ross-1976": "Ross, S. A. (1976). The arbitrage theory of capital asset pricing. Journal of Economic Theory 13(3), 341–360.",
    "shanken-1985": "Shanken, J. (1985). Multivariate tests of the zero-beta CAPM. Journal of Financial Economics 14(3), 327–348.",
    "shanken-1992": "Shanken, J. (1992). On the estimation of beta-pricing models. Review of Financial Studies 5(1), 1–33.",
    "storey-2002": "Storey, J. D. (2002). A direct approach to false discovery rates. Journal of the Royal Statistical Society B 64(3), 479–498.",
    "treynor-black-1973": "Treynor, J. L. and Black, F. (1973). How to use security analysis to improve portfolio selection. Journal of Business 46(1), 66–86.",
    "vasicek-1973": "Vasicek, O. A. (1973). A note on using cross-sectional information in Bayesian estimation of security betas. Journal of Finance 28(5), 1233–1239.",
    "wang-wu-yang-2015": "Wang, Y., Wu, C. and Yang, L. (2015). Hedging with futures: does anything beat the naïve hedging strategy? Management Science 61(12), 2870–2889.",
    "white-1980": "White, H. (1980). A heteroskedasticity-consistent covariance matrix estimator and a direct test for heteroskedasticity. Econometrica 48(4), 817–838.",
}


def reference(key: str) -> str:
    """Full reference of a source.

    Raises
    ------
    SettingError
        For an unknown key, with the nearest known ones.
    """
    if key not in SOURCES:
        raise SettingError(f"There is no source '{key}'", remedy=nearest(key, SOURCES))
    return SOURCES[key]


def cite(keys: Iterable[str]) -> list[str]:
    """Full references of several sources, each once, in alphabetical order."""
    return sorted({reference(key) for key in keys})
