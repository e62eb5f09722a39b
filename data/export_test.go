package data

// CheckExperiment is for the tests of package data_test.
var CheckExperiment = checkExperiment
