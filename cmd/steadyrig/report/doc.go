// Package report draws a run as one self-contained HTML file: the verdict first, then plots and tables, and cautions
// where someone could be hurt. It draws only; all figures come from ident and design.
package report
