# Printing: one layout for every object, at most 80 columns, readable without colour.
# A title line, a table of right-aligned figures, then lines that open with a short label.

line_width <- function() min(80L, max(60L, getOption("width", 80L)))

cat_lines <- function(...) cat(unlist(list(...)), sep = "\n")

label_line <- function(label, text, wrap = FALSE) {
  if (wrap) text <- paste(text, collapse = ", ")
  lines <- strwrap(text, line_width() - 11L)
  if (!length(lines)) lines <- ""
  paste0(c(formatC(label, width = -11L), strrep(" ", 11L))[pmin(seq_along(lines), 2L)], lines)
}

format_count <- function(x) format(x, big.mark = ",", trim = TRUE, scientific = FALSE)

count_of <- function(n, noun, plural = paste0(noun, "s")) {
  paste(format_count(n), if (isTRUE(n == 1)) noun else plural)
}

format_p <- function(p) {
  ifelse(is.na(p), "NA", ifelse(p < 0.0005, "<0.001", formatC(p, digits = 3, format = "f")))
}

# Figures of one column with the same number of decimals: enough for `digits` significant
# ones in the smallest standard error shown beside them.
format_figures <- function(x, scale = x, digits = 3L) {
  size <- abs(scale[is.finite(scale) & scale != 0])
  if (!length(size)) {
    return(format(x))
  }
  decimals <- digits - 1L - floor(log10(min(size)))
  if (decimals > 9 || max(abs(x[is.finite(x)]), 0) >= 1e7) {
    return(formatC(x, digits = digits, format = "g"))
  }
  formatC(x, digits = max(0L, min(decimals, 9L)), format = "f")
}

# A plain table: `right` names the right-aligned columns, `wrap` the last column, whose text
# goes on below itself when the line is full.
print_columns <- function(table, right = character(), wrap = NULL, indent = 2L) {
  names <- names(table)
  cells <- lapply(names, function(name) as.character(table[[name]]))
  width <- mapply(function(cell, name) max(nchar(c(cell, name))), cells, names)
  pad <- function(text, j) formatC(text, width = if (names[j] %in% right) width[j] else -width[j])
  fixed <- which(!names %in% wrap)
  left <- function(values) {
    paste0(strrep(" ", indent), paste(vapply(fixed, function(j) pad(values[j], j), ""), collapse = "  "))
  }
  emit <- function(values) {
    start <- left(values)
    if (is.null(wrap)) {
      return(sub(" +$", "", start))
    }
    room <- max(16L, line_width() - nchar(start) - 2L)
    tail <- strwrap(values[match(wrap, names)], room)
    if (!length(tail)) tail <- ""
    sub(" +$", "", paste0(c(start, strrep(" ", nchar(start)))[pmin(seq_along(tail), 2L)], "  ", tail))
  }
  rows <- lapply(seq_along(cells[[1L]]), function(i) emit(vapply(cells, `[`, "", i)))
  cat_lines(emit(names), rows)
}

# Each row has its own number of decimals, set by its standard error: one number for all
# would either hide the small premia or pad the large ones.
coefficient_table <- function(tidied, value = "premium", level = 0.95) {
  figures <- function(x) {
    mapply(format_figures, x, tidied$std.error, USE.NAMES = FALSE)
  }
  out <- data.frame(
    term = tidied$term,
    value = figures(tidied$estimate),
    error = figures(tidied$std.error),
    t = formatC(tidied$statistic, digits = 2, format = "f"),
    p = format_p(tidied$p.value),
    interval = paste(figures(tidied$conf.low), "to", figures(tidied$conf.high))
  )
  names(out)[c(2L, 6L)] <- c(value, paste0(100 * level, "% interval"))
  out
}
