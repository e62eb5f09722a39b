// Package words says figures and results in words, for the console and the report alike.
package words
