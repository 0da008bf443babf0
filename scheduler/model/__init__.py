"""The market model as pure array functions: the only home of its formulas.

References, cited by key elsewhere:

- [Orrell 2020] D. Orrell, "A quantum model of supply and demand", Physica A 539, 122928.
- [AFS 2010] A. Alfonsi, A. Fruth, A. Schied, "Optimal execution strategies in limit order
  books with general shape functions", Quantitative Finance 10(2), 143-157 (model 1).
- [AC 2001] R. Almgren, N. Chriss, "Optimal execution of portfolio transactions",
  J. Risk 3(2), 5-39.
- [ATHL 2005] R. Almgren, C. Thum, E. Hauptmann, H. Li, "Direct estimation of equity market
  impact", Risk 18(7), 57-62.
- [SK 2024] Y. Sato, K. Kanazawa, Phys. Rev. Lett. 135, 257401 (arXiv 2411.13965).
- [KO 2016] A. Kyle, A. Obizhaeva, "Market microstructure invariance", Econometrica 84(4).
"""
