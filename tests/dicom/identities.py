"""A marked patient: what a written object must repeat of it, and what it must not."""

MARK = "QUMRAKX"
IDENTITY = {
    "PatientName": f"{MARK}^ANN^B^Dr",
    "PatientID": f"{MARK}-7",
    "IssuerOfPatientID": f"{MARK} ISSUER",
    "PatientBirthDate": "19470317",
    "PatientSex": "O",
    "StudyDate": "20200229",
    "StudyTime": "010203.5",
    "StudyID": f"{MARK}1",
    "AccessionNumber": f"{MARK}ACC",
    "ReferringPhysicianName": f"{MARK}^DOC",
    "StudyDescription": f"head of {MARK}",
}
#: attributes of the source that belong to its own acquisition and not to patient or study
OTHERS = {
    "InstitutionName": f"{MARK} HOSPITAL",
    "OperatorsName": f"{MARK}^OPERATOR",
    "PatientAddress": f"{MARK} STREET",
    "PatientComments": MARK,
    "DeviceSerialNumber": MARK,
    "SeriesDescription": MARK,
    "ProtocolName": MARK,
}
