# The calls of lme4 that MODEL.md of a sealed archive holds, run as they stand, beside the archive's own tables.
#
#   Rscript benchmarks/model_text.R UNPACKED_ARCHIVE/data
#
# One line a fit: the sealed criterion (-2 log restricted likelihood); how far lme4's criterion lies from it at
# the sealed estimates; how far it lies where lme4's own search ends (above 0: lme4 stopped short); the largest
# distance of a fixed coefficient there, in its standard errors.
suppressMessages(library(lme4))
home <- commandArgs(TRUE)[1]
text <- paste(readLines(file.path(home, "MODEL.md"), encoding = "UTF-8"), collapse = "\n")
found <- function(pattern, words) regmatches(words, regexec(pattern, words))[[1]][2]

# Relative covariance factors in the order in which lme4 keeps its terms.
factors <- function(form, values) {
  residual <- values[["residual: variance"]]
  unlist(lapply(names(form$reTrms$cnms), function(group) {
    of <- function(what) values[[paste0(sub("^unit_", "", group), ": ", what)]] / residual
    first <- sqrt(max(of("variance of column 1"), 0))
    if (length(form$reTrms$cnms[[group]]) == 1) return(first)
    mixed <- if (first > 0) of("covariance of columns 1 and 2") / first else 0
    c(first, mixed, sqrt(max(of("variance of column 2") - mixed^2, 0)))
  }))
}

for (part in strsplit(text, "\n## ", fixed = TRUE)[[1]]) {
  call <- found("```r\n([^`]*)\n```", part)
  if (is.na(call)) next
  folder <- file.path(home, "model", found("Files: `model/([^`]*)/`", part))
  sealed <- as.numeric(found("log restricted likelihood: ([^,]*),", part))
  design <- read.csv(file.path(folder, "design.csv"))
  components <- read.csv(file.path(folder, "component_covariance.csv"))
  fixed <- read.csv(file.path(folder, "fixed_covariance.csv"))
  rows <- regmatches(part, gregexpr("\n\\| f[0-9]+ \\|[^\n]*", part))[[1]]
  estimates <- sapply(strsplit(rows, " | ", fixed = TRUE), function(cells) as.numeric(cells[length(cells) - 1]))
  errors <- sqrt(diag(as.matrix(fixed[, -1])))
  form <- eval(parse(text = sub("lmer(", "lFormula(", call, fixed = TRUE)))
  criterion <- eval(parse(text = sub("REML = TRUE)", "REML = TRUE, devFunOnly = TRUE)", call, fixed = TRUE)))
  there <- criterion(factors(form, setNames(components$estimate, components$component))) - sealed
  fit <- suppressWarnings(suppressMessages(eval(parse(text = call))))
  apart <- max(abs(fixef(fit) - estimates) / errors)
  cat(sprintf("%s: %.6f; there %+.1e; own search %+.1e; coefficients %.1e\n",
              basename(folder), sealed, there, REMLcrit(fit) - sealed, apart))
}
