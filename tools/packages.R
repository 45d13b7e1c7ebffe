# The packages that DESCRIPTION asks for, and where this user may install them.
#
#   Rscript tools/packages.R missing OUT FIELD...   names missing or too old, to file OUT
#   Rscript tools/packages.R library OUT            the library to install into, to OUT
#   Rscript tools/packages.R install NAME...        installs these from CRAN
#
# Answers go to a file because a user's start-up profile may print to standard output.

required_packages <- function(fields) {
  entries <- unlist(strsplit(read.dcf("DESCRIPTION", fields = fields), ","))
  entries <- gsub("\\s+", "", entries[!is.na(entries)])
  pattern <- "^([A-Za-z0-9.]+)(\\(([<>=]+)([0-9.-]+)\\))?$"
  parts <- do.call(rbind, regmatches(entries, regexec(pattern, entries)))
  parts[parts[, 2] != "R", c(2, 4, 5), drop = FALSE]
}

is_satisfied <- function(name, comparison, version) {
  installed <- tryCatch(utils::packageVersion(name), error = function(e) NULL)
  if (is.null(installed)) return(FALSE)
  !nzchar(comparison) || match.fun(comparison)(installed, version)
}

missing_packages <- function(fields) {
  required <- required_packages(fields)
  satisfied <- vapply(
    seq_len(nrow(required)),
    function(i) is_satisfied(required[i, 1], required[i, 2], required[i, 3]),
    logical(1)
  )
  unique(required[!satisfied, 1])
}

writable_library <- function() {
  writable <- Filter(function(path) file.access(path, 2) == 0, .libPaths())
  if (length(writable)) return(writable[[1]])
  user <- path.expand(strsplit(Sys.getenv("R_LIBS_USER"), .Platform$path.sep)[[1]][1])
  dir.create(user, recursive = TRUE, showWarnings = FALSE)
  normalizePath(user, mustWork = TRUE)
}

install_from_cran <- function(names) {
  if (!isTRUE(getOption("repos")["CRAN"] != "@CRAN@")) {
    utils::chooseCRANmirror(ind = 1, local.only = TRUE)
  }
  utils::install.packages(names, lib = writable_library(), Ncpus = 2)
}

arguments <- commandArgs(trailingOnly = TRUE)
switch(
  arguments[1],
  missing = writeLines(missing_packages(arguments[-(1:2)]), arguments[2]),
  library = writeLines(writable_library(), arguments[2]),
  install = install_from_cran(arguments[-1])
)
