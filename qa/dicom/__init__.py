"""DICOM in: the outside world becomes arrays with geometry; nothing past this room knows a DICOM tag."""
