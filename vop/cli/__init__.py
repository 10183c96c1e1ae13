"""Click commands, one file each: parse, call one public function, print. No numerics."""
