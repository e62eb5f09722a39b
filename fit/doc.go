// Package fit estimates models from records of sampled input and output: numbers in, numbers out. It knows no file,
// unit or rig, and takes no decision of policy.
package fit
