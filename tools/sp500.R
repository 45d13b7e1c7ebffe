# Computes what the vignette sp500-members shows; see there. The data are not part of the
# package: this needs the CRAN packages qrmdata and xts, and lambdabar itself.
#   Rscript tools/sp500.R vignettes/sp500-members.txt

suppressPackageStartupMessages({
  library(lambdabar)
  library(xts)
})
file <- commandArgs(trailingOnly = TRUE)[1L]
if (is.na(file)) stop("give the file to write, such as vignettes/sp500-members.txt")

data(SP500_const, SP500, package = "qrmdata")
as_matrix <- function(x) matrix(as.numeric(x), nrow(x), dimnames = list(NULL, colnames(x)))
simple_returns <- function(prices) prices[-1L, , drop = FALSE] / prices[-nrow(prices), , drop = FALSE] - 1

prices <- as_matrix(SP500_const)
days <- as.Date(index(SP500_const))
level <- as.numeric(SP500)[match(days, as.Date(index(SP500)))]

daily_rows <- stack_returns(simple_returns(prices), cbind(mkt = simple_returns(cbind(level))[, 1L]), period = days[-1L])
daily <- asset_panel(daily_rows[is.finite(daily_rows$ret), ], "asset", "period")

month <- as.integer(format(days, "%Y%m"))
last <- which(!duplicated(month, fromLast = TRUE))
monthly_rows <- stack_returns(simple_returns(prices[last, ]), period = month[last][-1L])
monthly <- suppressMessages(asset_panel(monthly_rows[is.finite(monthly_rows$ret), ], "asset", "period"))

clock <- system.time(betas <- exposures(daily, ret ~ mkt, window = window_rolling(250, min_obs = 120)))
naive <- price_factors(monthly, ret ~ mkt, exposure = betas, min_assets = 50)
corrected <- price_factors(monthly, ret ~ mkt, exposure = betas, min_assets = 50, correct = "bias")
instruments <- price_factors(monthly, ret ~ mkt, exposure = betas, min_assets = 50, correct = "instruments")
lagged <- exposures(daily, ret ~ mkt, window = window_rolling(250, min_obs = 120), lead_lag = c(0, 1))
with_lag <- price_factors(monthly, ret ~ mkt, exposure = lagged, min_assets = 50, correct = "bias")

shown <- function(x) capture.output(print(x))
rows <- function(fit) generics::tidy(fit)[2L, c("estimate", "std.error", "statistic")]
result <- list(
  daily = shown(daily), odd = shown(panel_health(daily)), betas = shown(betas), seconds = clock[["elapsed"]],
  naive = shown(naive), corrected = shown(corrected),
  side_by_side = data.frame(
    remedy = c("none", "bias", "instruments", "bias, one lag of the index"),
    do.call(rbind, lapply(list(naive, corrected, instruments, with_lag), rows))
  ),
  mean_index = mean(simple_returns(cbind(level[last]))[, 1L]), versions = as.character(packageVersion("qrmdata"))
)
draft <- paste0(file, ".part")
dput(result, draft)
invisible(file.rename(draft, file))
