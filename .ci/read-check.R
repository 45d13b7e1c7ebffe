# Prints what the log of R CMD check complains about and leaves with 1 unless nothing but
# the note on a first submission is there. Argument: the log's path.
log <- commandArgs(trailingOnly = TRUE)[1]

is_first_submission <- function(check, output) {
  lines <- trimws(strsplit(output, "\n")[[1]])
  rest <- lines[nzchar(lines) & !grepl("^(Maintainer: |New submission$)", lines)]
  check == "CRAN incoming feasibility" && length(rest) == 0
}

details <- as.data.frame(tools::check_packages_in_dir_details(logs = log))
details <- details[!details$Status %in% c("OK", "SKIPPED"), ]
for (i in seq_len(nrow(details))) {
  cat(details$Status[i], ": ", details$Check[i], "\n", details$Output[i], "\n", sep = "")
}
allowed <- mapply(is_first_submission, details$Check, details$Output)
is_complete <- any(grepl("^Status: ", readLines(log)))
if (!is_complete) cat("The check stopped before its end.\n")
quit(status = as.integer(!is_complete || !all(unlist(allowed))))
