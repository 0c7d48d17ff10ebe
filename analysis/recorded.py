weigh_once = guess_feature = None
