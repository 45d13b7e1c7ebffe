# The main job on the invented market: health, premia on characteristics, the error ladder,
# premia on factor exposures that stay and that move, joint tests, and what a referee asks next.
library(lambdabar)

heading <- function(text) cat("\n", text, "\n", strrep("-", nchar(text)), "\n\n", sep = "")

cat("The Velmora exchange is invented: its firms, returns and premia are simulated.\n")
market <- demo_market()

heading("1  The panel")
panel <- asset_panel(market, asset = "firm", period = "month")
print(panel)
cat("\n")
print(panel_health(panel))

heading("2  What do characteristics earn?")
traits <- price_traits(panel, ret ~ size + value + turnover)
print(traits)
cat("\n")
print(term_test(traits))
truth <- attr(market, "true_premia")
cat("", strwrap(paste("True premia:", paste(names(truth), truth, collapse = ", "))), sep = "\n")

heading("3  How sure can one be? The same coefficient under many error structures")
print(error_ladder(traits, terms = c("size", "value")))

heading("4  What do factor exposures earn? 400 firms, ragged")
print(price_factors(panel, ret ~ mkt + smb, errors = err_eiv("robust")))

heading("5  Betas that move, corrected for their own error")
betas_by_month <- exposures(panel, ret ~ mkt, window = window_rolling(60, min_obs = 24))
print(betas_by_month)
for (correct in c("none", "bias")) {
  cat("\n")
  print(price_factors(panel, ret ~ mkt, exposure = betas_by_month, correct = correct))
}

heading("6  Premia on exposures of 16 portfolios, and joint tests of the pricing errors")
# Firms are sorted by their betas in the first half of the sample and held in the second, so
# that the sort sees nothing of the returns it is tested on.
half <- 201312
early <- asset_panel(market[market$month <= half, ], "firm", "month")
betas <- augment(price_factors(early, ret ~ mkt + smb, errors = err_eiv("robust"), min_obs = 36))
betas <- betas[is.finite(betas$beta_mkt), ]
quarter <- function(x) cut(rank(x, ties.method = "first"), 4, labels = FALSE)
betas$cell <- paste0("mkt", quarter(betas$beta_mkt), ".smb", quarter(betas$beta_smb))
late <- merge(market[market$month > half, ], betas[c("asset", "cell")], by.x = "firm", by.y = "asset")
portfolios <- aggregate(cbind(ret, mkt, smb) ~ cell + month, late, mean)
portfolios <- asset_panel(portfolios, "cell", "month")
fit <- price_factors(portfolios, ret ~ mkt + smb)
print(fit)
cat("\n")
print(alpha_test(fit))
cat("\n")
print(error_ladder(fit, terms = "mkt"))

heading("7  What a referee asks next")
print(pricing_r2(fit, rival = price_factors(portfolios, ret ~ mkt)))
cat("\n")
print(rank_test(fit))
cat("\n")
print(premium_set(fit))
cat("\n")
print(bandwidth_path(traits))
cat("\n")
print(break_test(traits, term = c("size", "value", "turnover")))

cat("\nThese are statistics of an invented market. On real data they are statistical\n")
cat("evidence under stated assumptions, not investment advice.\n")
