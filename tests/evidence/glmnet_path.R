# A file of doubles in: rows, columns, strengths, outcomes, the columns one after the other, strengths from strong to weak.
# A file of doubles out: for each strength the intercept, then the weights.
# glmnet's loss is the mean, so lambda is the strength; columns are taken as they are; the whole path goes in one call,
# since a single lambda would start cold; thresh is for a change of the deviance.
if (!requireNamespace("glmnet", quietly = TRUE)) quit(status = 3)
suppressMessages(library(glmnet))
files <- commandArgs(TRUE)
from <- file(files[1], "rb")
shape <- readBin(from, "double", 3)
y <- readBin(from, "double", shape[1])
x <- matrix(readBin(from, "double", shape[1] * shape[2]), shape[1], shape[2])
strengths <- readBin(from, "double", shape[3])
close(from)
path <- glmnet(x, y, family = "binomial", alpha = 1, lambda = strengths, standardize = FALSE, thresh = 1e-14,
               maxit = 1e7)
stopifnot(path$jerr == 0, identical(path$lambda, strengths))
to <- file(files[2], "wb")
writeBin(as.vector(rbind(path$a0, as.matrix(path$beta))), to)
close(to)
