"""The ONNX graph: standard operators of opset 18, IR version 8."""
