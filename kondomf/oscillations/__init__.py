"""What would a magnetometer or a transport probe see?"""
