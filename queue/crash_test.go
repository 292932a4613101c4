package queue_test

func beChild() {}
