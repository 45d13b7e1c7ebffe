#' An invented market, for examples and for trying things out
#'
#' The Velmora exchange, its firms and every number are **invented**. The market is drawn from
#' a known model, so that estimates can be held against the truth: firms list and delist, are
#' suspended for a while, and have missing returns and characteristics; two factors are
#' traded and one, an economy-wide growth surprise, is not and is autocorrelated; returns
#' carry firm effects and month effects, so that errors which ignore either are wrong.
#'
#' @param firms Number of firms that ever list, 2 to 900.
#' @param months Number of months, 12 or more; the last one is December 2023.
#' @param seed One whole number. The same arguments give the same market on every machine,
#'   and the caller's random numbers are left as they were.
#'
#' @details
#' The excess return of firm i in month t is
#' \deqn{r_{it} = \beta_i'(\lambda + u_t) + (\delta + v_t)'z_{it} + a_i + m_t + e_{it}}{
#'       r_it = beta_i'(lambda + u_t) + (delta + v_t)'z_it + a_i + m_t + e_it}
#' with factor surprises u, premia \eqn{\lambda}, characteristics z known before the month
#' begins, their premia \eqn{\delta} with swings v from month to month, a firm effect a and a
#' month effect m. Betas do not
#' depend on the characteristics.
#'
#' @return A data frame, sorted by firm and month, with about 0.7 `firms` × `months` rows:
#'   * `firm` (text), `month` (integer, yyyymm), `industry` (factor with six levels);
#'   * `ret`: excess return, decimal a month; `NA` in about 1 % of the rows;
#'   * `mkt`, `smb`: returns of the two traded factors; `growth`: the surprise in growth, in
#'     the same units, with autocorrelation 0.5;
#'   * `size`: log market value; `value`: log of book to market; `turnover`: share of the firm
#'     traded in the year before; the last two are `NA` in a few percent of the rows;
#'   * `mcap`: market value, in millions of the invented currency.
#'
#'   The attribute `true_premia` has the premium of each factor (a month, for a beta of one)
#'   and of each characteristic (a month, for a unit), and `true_betas` each firm's betas.
#'
#' @examples
#' market <- demo_market(firms = 30, months = 36)
#' head(market)
#' attr(market, "true_premia")
#' @export
demo_market <- function(firms = 400, months = 240, seed = 1) {
  check_whole(firms, "firms", 2, 900)
  check_whole(months, "months", 12, 6000)
  check_whole(seed, "seed", -1e9, 1e9)
  with_own_random_numbers(seed, invent_market(as.integer(firms), as.integer(months)))
}

check_whole <- function(value, arg, low, high, call = rlang::caller_env()) {
  fine <- is.numeric(value) && length(value) == 1L && !is.na(value) &&
    value == floor(value) && value >= low && value <= high
  if (!fine) {
    abort_input("{.arg {arg}} must be one whole number from {low} to {high}.", call = call)
  }
  invisible(value)
}

# Evaluates `draw` under a fixed generator and puts the caller's generator back.
with_own_random_numbers <- function(seed, draw) {
  kinds <- RNGkind()
  had_seed <- exists(".Random.seed", globalenv(), inherits = FALSE)
  old_seed <- if (had_seed) get(".Random.seed", globalenv(), inherits = FALSE)
  on.exit({
    RNGkind(kinds[1L], kinds[2L], kinds[3L])
    if (had_seed) {
      assign(".Random.seed", old_seed, envir = globalenv())
    } else {
      rm(".Random.seed", envir = globalenv())
    }
  })
  set.seed(seed, kind = "Mersenne-Twister", normal.kind = "Inversion", sample.kind = "Rejection")
  force(draw)
}

invent_market <- function(N, T) {
  premia <- c(
    mkt = 0.006, smb = 0.003, growth = 0.002, size = -0.0012, value = 0.0030, turnover = -0.0020
  )
  # Factor surprises; growth is an AR(1) with coefficient 0.5.
  mkt <- stats::rnorm(T, 0, 0.045)
  smb <- 0.15 * mkt + stats::rnorm(T, 0, 0.030)
  growth <- as.numeric(stats::filter(stats::rnorm(T, 0, 0.02), 0.5, "recursive"))
  month_effect <- stats::rnorm(T, 0, 0.010)
  # What a characteristic earns differs from month to month around its premium.
  swing <- cbind(
    size = stats::rnorm(T, 0, 0.003), value = stats::rnorm(T, 0, 0.010), turnover = stats::rnorm(T, 0, 0.006)
  )

  betas <- cbind(mkt = stats::rnorm(N, 1, 0.45), smb = stats::rnorm(N, 0.5, 0.6), growth = stats::rnorm(N, 0.3, 0.8))
  industry <- sample(invented_industries(), N, replace = TRUE)
  firm_effect <- stats::rnorm(N, 0, 0.008)
  level <- cbind(size = stats::rnorm(N, 6, 1.6), value = stats::rnorm(N, -0.4, 0.6), turnover = stats::rnorm(N, 1, 0.5))
  idiosyncratic <- stats::runif(N, 0.05, 0.13)

  first <- pmax(1L, as.integer(stats::runif(N, -0.8 * T, 0.85 * T)))
  last <- pmin(T, first + pmax(11L, as.integer(stats::rexp(N, 1 / (0.9 * T)))))
  calendar <- rev(12L * 2023L + 11L - (seq_len(T) - 1L))
  label <- calendar %/% 12L * 100L + calendar %% 12L + 1L
  names <- invented_names(N)

  rows <- lapply(seq_len(N), function(i) {
    t <- first[i]:last[i]
    n <- length(t)
    wander <- function(sd) as.numeric(stats::filter(stats::rnorm(n, 0, sd), 0.95, "recursive"))
    size <- level[i, "size"] + wander(0.10)
    value <- level[i, "value"] + wander(0.08)
    turnover <- exp(level[i, "turnover"] - 1 + wander(0.12))
    ret <- as.numeric(cbind(mkt, smb, growth)[t, , drop = FALSE] %*% betas[i, ]) +
      sum(premia[c("mkt", "smb", "growth")] * betas[i, ]) +
      (premia[["size"]] + swing[t, "size"]) * (size - 6) +
      (premia[["value"]] + swing[t, "value"]) * (value + 0.4) +
      (premia[["turnover"]] + swing[t, "turnover"]) * turnover +
      firm_effect[i] + month_effect[t] + stats::rnorm(n, 0, idiosyncratic[i])
    ret[stats::runif(n) < 0.01] <- NA
    mcap <- exp(size)
    value[stats::runif(n) < 0.03] <- NA
    turnover[stats::runif(n) < 0.02] <- NA
    trading <- rep(TRUE, n)
    if (n > 30L && stats::runif(1) < 0.15) {
      halt <- sample.int(n - 12L, 1L) + 5L
      trading[halt + seq_len(sample.int(5L, 1L))] <- FALSE
    }
    vctrs::new_data_frame(list(
      firm = rep(names[i], n), month = label[t], industry = rep(industry[i], n), ret = pmax(ret, -0.95),
      mkt = mkt[t] + premia[["mkt"]], smb = smb[t] + premia[["smb"]], growth = growth[t],
      size = size, value = value, turnover = turnover, mcap = mcap
    ))[trading, ]
  })
  market <- do.call(rbind, rows)
  market <- market[order(market$firm, market$month, method = "radix"), ]
  market$industry <- factor(market$industry, levels = invented_industries())
  rownames(market) <- NULL
  attr(market, "true_premia") <- premia
  attr(market, "true_betas") <- `rownames<-`(betas, names)
  market
}

invented_industries <- function() c("fishing", "glass", "harbours", "milling", "printing", "salt")

invented_names <- function(N) {
  place <- c(
    "Ashvale", "Brackwater", "Corvin", "Dunmarrow", "Ellsbeck", "Fenwold", "Garrowby", "Hollin",
    "Ivemere", "Jorvale", "Kelderby", "Lorrimouth", "Marrowfen", "Nettleby", "Ostwick",
    "Pellbrook", "Quillmoor", "Rushholm", "Saltmere", "Thornvale", "Umberley", "Varrow",
    "Wexmoor", "Yarrowdale", "Zennick", "Birchgate", "Cawdenby", "Dellmoor", "Eastmarrow", "Farholm"
  )
  trade <- c(
    "Boats", "Cables", "Carriers", "Chandlers", "Dyes", "Foundry", "Freight", "Glassworks", "Grain",
    "Ironworks", "Lamps", "Lines", "Looms", "Mills", "Nets", "Paper", "Pottery", "Presses", "Quays",
    "Ropes", "Salt", "Sawmill", "Ships", "Smelting", "Spinning", "Stores", "Tanning", "Timber",
    "Tools", "Wharves"
  )
  sort(sample(as.vector(outer(place, trade, paste)), N), method = "radix")
}
