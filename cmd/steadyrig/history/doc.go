// Package history keeps what was found about a rig over the years: a plain JSON Lines file beside the rig file, one
// entry a line, to which lines are only ever added.
//
// Promises of the file:
//
//   - A line once written stays as it is, fields that this version does not know included.
//   - Writers wait for each other (an advisory lock, where the system has one) and write a line at once, at the end.
//   - A line that was left half written, because its writer was killed or the disk was full, costs that line alone: the
//     next one starts on a line of its own, and a reader tells of the broken one by its number.
package history
